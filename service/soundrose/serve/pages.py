"""codec: plain pages with nothing from elsewhere: the start page, and every call, made from the OpenAPI document."""

from collections.abc import Mapping
from html import escape
from typing import Any

from fastapi import FastAPI
from fastapi.responses import HTMLResponse, Response

from soundrose._version import __version__
from soundrose.serve.shapes import any_problem
from soundrose.settings_types import Settings

__all__ = ["CAUTIONS", "add_pages", "calls_page", "start_page"]

CAUTIONS = (
    "Not a navigation or collision-avoidance aid. Absence of detection is not absence of an animal or a vessel; sounds "
    "outside the bands ({bands}) are not heard at all. Decisions on mitigation are for qualified observers under the "
    "permit and local rules in force. Levels are as good as the calibration entered. A line array cannot tell port "
    "from starboard."
)

_STYLE = """:root { color-scheme: light dark; }
body { font: 16px/1.45 system-ui, sans-serif; max-width: 66rem; margin: 1.5rem auto; padding: 0 1rem; }
h1 { font-size: 1.4rem; } h2 { font-size: 1.1rem; margin: 2rem 0 .3rem; }
img { display: block; width: 100%; height: auto; border: 1px solid #8886; background: #8882; }
table { border-collapse: collapse; } td, th { text-align: left; vertical-align: top; padding: .15rem .9rem .15rem 0; }
code { font-size: .95em; } .old { opacity: .35; } #state { font-weight: 600; min-height: 1.5em; }
"""

_SCRIPT = """// Reloads the picture of the newest map; says so, and fades it, when it is no longer new.
"use strict";
const picture = document.getElementById("map"), state = document.getElementById("state");
const choice = document.getElementById("band");
let tag = "", changed = Date.now(), shown = "";
async function reload() {
  try {
    const band = choice.value, asked = "/api/v1/map?format=png&band=" + encodeURIComponent(band);
    const answer = await fetch(asked, tag && shown === band ? { headers: { "If-None-Match": tag } } : {});
    if (answer.status === 200) {
      const old = picture.src;
      picture.src = URL.createObjectURL(await answer.blob());
      if (old.startsWith("blob:")) URL.revokeObjectURL(old);
      tag = answer.headers.get("ETag"); shown = band; changed = Date.now();
      state.textContent = "";
    } else if (answer.status === 304) state.textContent = "";
    else state.textContent = (await answer.json()).detail;
  } catch { state.textContent = "The service does not answer."; }
  const age = (Date.now() - changed) / 1000, old = age > 5;
  picture.classList.toggle("old", old);
  if (old && tag && !state.textContent) state.textContent = "No new map for more than 5 s.";
  setTimeout(reload, 1000);
}
reload();
"""


def start_page(settings: Settings) -> str:
    """The page at `/plain`: the newest map, its links, and the cautions."""
    ranges = ", ".join(f"{band.band_hz[0]:g} to {band.band_hz[1]:g} Hz" for band in settings.bands)
    options = "".join(f'<option value="{escape(b.name)}">{escape(b.name)}</option>' for b in settings.bands)
    body = f"""<h1>Array {escape(settings.array.id)}</h1>
<p><label>Band <select id="band">{options}</select></label></p>
<p id="state" role="status"></p>
<img id="map" alt="Newest frequency-bearing map: level over frequency and cone angle" width="1000" height="620">
<p>{escape(CAUTIONS.format(bands=ranges))}</p>
<p><a href="/api/v1/status">Status</a> · <a href="/api/v1/health">hydrophones</a> ·
<a href="/api/v1/array">array</a> · <a href="/readyz">readiness</a> · <a href="/api">every call</a></p>
<script src="/page.js"></script>"""
    return _page(f"{settings.array.id}: soundrose", body)


def calls_page(document: Mapping[str, Any]) -> str:
    """Every call with its parameters and answers, from an OpenAPI document."""
    parts = [f"<h1>Every call</h1><p>{escape(document['info'].get('description', ''))}</p>"]
    parts.append('<p>For programs: <a href="/openapi.json">openapi.json</a>. <a href="/plain">Plain start page</a></p>')
    parts.append(f"<p>Any call may also answer:</p><table>{_answers(any_problem())}</table>")
    for path, item in sorted(document["paths"].items()):
        for method, call in item.items():
            parts.append(_call(method.upper(), path, call, document))
    return _page("soundrose: every call", "\n".join(parts))


def _call(method: str, path: str, call: Mapping[str, Any], document: Mapping[str, Any]) -> str:
    rows = [_parameter(parameter) for parameter in [*call.get("parameters", ()), *_body(call, document)]]
    table = f"<table><tr><th>parameter</th><th>allowed</th><th></th></tr>{''.join(rows)}</table>" if rows else ""
    usual = {str(status) for status in any_problem()} - {"503"}
    answers = _answers({status: answer for status, answer in call["responses"].items() if status not in usual})
    title = f"<h2><code>{escape(method)} {escape(path)}</code></h2><p>{escape(call.get('summary', ''))}.</p>"
    return f"{title}{table}<table><tr><th>status</th><th>type</th><th></th></tr>{answers}</table>"


def _answers(responses: Mapping[Any, Mapping[str, Any]]) -> str:
    return "".join(
        f"<tr><td><code>{status}</code></td><td>{escape(', '.join(answer.get('content', {})))}</td>"
        f"<td>{escape(answer.get('description', ''))}</td></tr>"
        for status, answer in sorted(responses.items())
    )


def _body(call: Mapping[str, Any], document: Mapping[str, Any]) -> list[dict[str, Any]]:
    """The keys of a JSON body, in the form of parameters."""
    schema = call.get("requestBody", {}).get("content", {}).get("application/json", {}).get("schema", {})
    if "$ref" in schema:
        schema = document["components"]["schemas"][schema["$ref"].rpartition("/")[2]]
    needed = schema.get("required", ())
    return [
        {"name": f"body: {name}", "schema": part, "required": name in needed}
        for name, part in schema.get("properties", {}).items()
    ]


def _parameter(parameter: Mapping[str, Any]) -> str:
    schema = parameter.get("schema", {})
    choices = [part for part in schema.get("anyOf", [schema]) if part.get("type") != "null"]
    allowed = "; ".join(_allowed(part) for part in choices)
    if parameter.get("required"):
        allowed += "; required"
    elif "default" in schema:
        allowed += f"; default {schema['default']}"
    name, about = parameter["name"], parameter.get("description", schema.get("description", ""))
    return f"<tr><td><code>{escape(name)}</code></td><td>{escape(allowed)}</td><td>{escape(about)}</td></tr>"


def _allowed(schema: Mapping[str, Any]) -> str:
    if "enum" in schema or "const" in schema:
        return ", ".join(map(str, schema.get("enum", [schema.get("const")])))
    text = str(schema.get("type", "any"))
    low, high = schema.get("minimum"), schema.get("maximum")
    return text + (f" from {low:g}" if low is not None else "") + (f" to {high:.10g}" if high is not None else "")


def _page(title: str, body: str) -> str:
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width">
<title>{escape(title)}</title><link rel="stylesheet" href="/page.css"></head>
<body>
{body}
<p>soundrose {escape(__version__)}</p>
</body></html>
"""


def add_pages(app: FastAPI, settings: Settings) -> None:
    """`/plain`, `/api` and what they load."""
    start = start_page(settings)

    @app.get("/plain", include_in_schema=False)
    async def start_plain() -> HTMLResponse:
        return HTMLResponse(start)

    @app.get("/api", include_in_schema=False)
    async def calls() -> HTMLResponse:
        return HTMLResponse(calls_page(app.openapi()))

    @app.get("/page.js", include_in_schema=False)
    async def script() -> Response:
        return Response(_SCRIPT, media_type="text/javascript")

    @app.get("/page.css", include_in_schema=False)
    async def style() -> Response:
        return Response(_STYLE, media_type="text/css")
