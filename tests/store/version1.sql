-- A version-1 event log, dumped once; its bytes stay as they are. First row deleted by retention.
PRAGMA application_id=1397638226;
PRAGMA user_version=1;
BEGIN TRANSACTION;
CREATE TABLE event (id INTEGER PRIMARY KEY AUTOINCREMENT, kind TEXT NOT NULL, t INTEGER NOT NULL, recorded INTEGER NOT NULL, payload TEXT NOT NULL);
INSERT INTO "event" VALUES(2,'health',1796133601000000000,1796133601250000000,'{"channel":3,"from":"good","to":"dead","why":"no variation","level_db":-300.0}');
INSERT INTO "event" VALUES(3,'status',1796133602000000000,1796133602000000000,'{"what":"feed","from":"running","to":"stalled"}');
CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
INSERT INTO "meta" VALUES('floor','1');
INSERT INTO "meta" VALUES('log','00112233445566aa');
CREATE INDEX event_kind ON event (kind);
CREATE INDEX event_t ON event (kind, t);
DELETE FROM "sqlite_sequence";
INSERT INTO "sqlite_sequence" VALUES('event',3);
COMMIT;
