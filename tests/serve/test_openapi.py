"""The OpenAPI document: valid by its own rules, complete, and true: generated requests find no answer outside it."""

import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from openapi_spec_validator import OpenAPIV31SpecValidator
from web_rig import Served, serving

CALLS = ["/livez", "/readyz", "/api/v1/status", "/api/v1/health", "/api/v1/levels", "/api/v1/array", "/api/v1/map",
         "/api/v1/spectrum", "/api/v1/history"]  # fmt: skip


@pytest.fixture(scope="module")
def document(served: Served) -> dict[str, Any]:
    found: dict[str, Any] = served.get("/openapi.json").json()
    return found


def test_document_is_valid(document: dict[str, Any]) -> None:
    assert document["openapi"].startswith("3.1.")
    OpenAPIV31SpecValidator(document).validate()


def test_every_call_is_named_and_its_errors_are_problems(document: dict[str, Any]) -> None:
    assert set(document["paths"]) >= set(CALLS)
    names = [item["get"]["operationId"] for item in document["paths"].values()]
    assert len(set(names)) == len(names)
    assert all(re.fullmatch("[a-z_]+", name) for name in names)
    for path, item in document["paths"].items():
        answers = item["get"]["responses"]
        assert {"200", "403", "413", "429", "503"} <= set(answers), path
        for status, answer in answers.items():
            if status >= "400":
                assert set(answer["content"]) == {"application/problem+json"}, (path, status)
                assert answer["content"]["application/problem+json"]["schema"]["$ref"].endswith("ProblemAnswer")


def test_every_example_fits_its_schema(document: dict[str, Any]) -> None:
    """References lead into the document itself, so it is put about each schema."""
    seen = 0
    for path, item in document["paths"].items():
        for status, answer in item["get"]["responses"].items():
            for media, content in answer.get("content", {}).items():
                if "json" not in media:
                    continue
                schema = {**content["schema"], "components": document["components"]}
                Draft202012Validator(schema).validate(content["example"])
                seen += 1
                assert content["example"] != {}, (path, status)
    assert seen > 40


def test_examples_have_the_keys_of_true_answers(served: Served, document: dict[str, Any]) -> None:
    for path in CALLS:
        content = document["paths"][path]["get"]["responses"]["200"]["content"]["application/json"]
        answer = served.get(path + ("?cone_deg=90" if path.endswith("spectrum") else "")).json()
        Draft202012Validator({**content["schema"], "components": document["components"]}).validate(answer)
        assert set(content["example"]) <= set(answer) | {"since"}, path


@pytest.mark.parametrize("filled", [True, False], ids=["with messages", "before any message"])
def test_generated_requests_get_documented_answers(tmp_path: Path, filled: bool) -> None:
    """Statuses, media types, headers and bodies as documented, bad requests refused, other methods answered with 405.

    503 is documented, so 5xx is left to the check of statuses: any other is a finding. Parameters that are well
    formed each, but contradict each other, may be refused. POST is asked as JSON: else 403 comes before 405.
    """
    command = [
        sys.executable, "-m", "schemathesis.cli", "run", "--checks", "all",
        "--exclude-checks", "not_a_server_error,positive_data_acceptance", "-H", "Content-Type: application/json",
        "--continue-on-failure", "--max-examples", "60", "--max-time", "10",
        "--generation-deterministic", "--no-color",
    ]  # fmt: skip
    with serving() as running:
        if filled:
            running.fill()
        command.append(f"{running.url}/openapi.json")
        calls = sum(len(item) for item in running.get("/openapi.json").json()["paths"].values())
        done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=100, check=False)
        assert running.get("/livez").status == 200
    assert done.returncode == 0, done.stdout + done.stderr
    assert f"Tested: {calls}" in done.stdout
    generated = re.search(r"(\d+) generated", done.stdout)
    assert generated
    assert int(generated[1]) > 150
