"""codec: the OpenAPI document: FastAPI's, with the errors that any call may answer, all of them as problems."""

from typing import Any

from fastapi import FastAPI
from fastapi.routing import APIRoute

from soundrose.serve.problems import MEDIA_TYPE
from soundrose.serve.shapes import ProblemAnswer, any_problem

__all__ = ["install_document"]

_REFERENCE = {"$ref": "#/components/schemas/ProblemAnswer"}


def install_document(app: FastAPI) -> None:
    """Make `app.openapi` give the completed document. Made once, at the first call, when every call is there."""
    made: dict[str, Any] = {}

    def document() -> dict[str, Any]:
        if not made:
            made.update(_completed(FastAPI.openapi(app)))
            _put_examples_back(app, made)
        return made

    app.openapi = document  # type: ignore[method-assign]


def _completed(document: dict[str, Any]) -> dict[str, Any]:
    schemas = document.setdefault("components", {}).setdefault("schemas", {})
    schemas.setdefault("ProblemAnswer", ProblemAnswer.model_json_schema())
    for item in document["paths"].values():
        for call in item.values():
            for status, answer in any_problem().items():
                call["responses"].setdefault(str(status), answer)
            for status, answer in call["responses"].items():
                if status >= "400":
                    content = answer.setdefault("content", {})
                    content.pop("application/json", None)  # where FastAPI puts the schema of a model
                    content.setdefault(MEDIA_TYPE, {})["schema"] = _REFERENCE
    return document


def _put_examples_back(app: FastAPI, document: dict[str, Any]) -> None:
    """FastAPI leaves out keys whose value is null, in examples too."""
    for route in app.routes:
        if not isinstance(route, APIRoute) or not route.include_in_schema:
            continue
        for method in route.methods or ():
            call = document["paths"][route.path_format][method.lower()]
            for status, answer in route.responses.items():
                for media, content in answer.get("content", {}).items():
                    if "example" in content:
                        call["responses"][str(status)]["content"][media]["example"] = content["example"]
