"""process: the display's files, read once from where the package or the repository has them, and their calls."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from fastapi import FastAPI, Request, Response

import soundrose
from soundrose.errors import StartError
from soundrose.serve.conditional import content_tag, is_known
from soundrose.serve.problems import Problem

__all__ = ["TYPES", "File", "add_display", "find_display", "read_display"]

#: media types of all kinds of file there are; others are not served
TYPES = {
    ".html": "text/html; charset=utf-8",
    ".css": "text/css; charset=utf-8",
    ".js": "text/javascript; charset=utf-8",
    ".svg": "image/svg+xml",
    ".txt": "text/plain; charset=utf-8",
}
_INDEX = "index.html"


@dataclass(frozen=True, slots=True)
class File:
    """A file as it is answered."""

    body: bytes
    media_type: str
    tag: str


def find_display() -> Path:
    """Folder of the display: in an installed package beside its modules, else in the repository it was installed from.

    Raises StartError where it is in neither.
    """
    package = Path(soundrose.__file__).resolve().parent
    places = [package / "display", package.parents[1] / "clients" / "display"]
    for place in places:
        if (place / _INDEX).is_file():
            return place
    tried = ", ".join(str(place) for place in places)
    raise StartError(f"the display's {_INDEX} is in none of {tried}; install the package anew")


def read_display(folder: Path) -> dict[str, File]:
    """Every file of a kind in TYPES, by its path below the folder."""
    found = {}
    for path in sorted(folder.rglob("*")):
        if path.suffix in TYPES and path.is_file():
            body = path.read_bytes()
            found[path.relative_to(folder).as_posix()] = File(body, TYPES[path.suffix], content_tag(body))
    return found


def add_display(app: FastAPI, folder: Path) -> None:
    """`/` and `/display/...`."""
    files = read_display(folder)

    @app.get("/", include_in_schema=False)
    async def root(request: Request) -> Response:
        return _answer(files, _INDEX, request)

    @app.get("/display/{path:path}", include_in_schema=False)
    async def file(path: str, request: Request) -> Response:
        return _answer(files, path, request)


def _answer(files: Mapping[str, File], path: str, request: Request) -> Response:
    """The file, or 304 where the browser has it: it asks each time, so that a new version is seen at once."""
    found = files.get(path)
    if found is None:
        raise Problem(404, f"the display has no file {path[:120]!r}")
    headers = {"ETag": found.tag, "Cache-Control": "no-cache"}
    if is_known(found.tag, request.headers.getlist("if-none-match")):
        return Response(status_code=304, headers=headers)
    return Response(found.body, media_type=found.media_type, headers=headers)
