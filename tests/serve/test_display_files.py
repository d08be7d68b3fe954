"""The display's files: found in a checkout and in a wheel, served with type, tag and policy."""

import subprocess
import sys
import zipfile
from html.parser import HTMLParser
from pathlib import Path

import pytest
from fastapi import FastAPI
from web_rig import Served

import soundrose
from soundrose.errors import StartError
from soundrose.serve.display_files import TYPES, add_display, find_display, read_display

ROOT = Path(__file__).parents[2]


class Sources(HTMLParser):
    """What a page loads, and whether it holds script or style of its own."""

    def __init__(self) -> None:
        super().__init__()
        self.found: list[str] = []
        self.inline: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        self.found += [given[name] or "" for name in ("src", "href") if name in given]
        if (
            tag == "style"
            or (tag == "script" and "src" not in given)
            or any(a == "style" or a[:2] == "on" for a in given)
        ):
            self.inline.append(tag)


def test_the_display_is_at_the_root_and_loads_only_what_is_here(served: Served) -> None:
    answer = served.get("/")
    assert answer.headers["content-type"] == "text/html; charset=utf-8"
    page = Sources()
    page.feed(answer.body.decode())
    assert page.inline == []
    assert len(page.found) > 3
    for link in page.found:
        assert link.startswith("/")
        assert served.get(link).status == 200, link


@pytest.mark.parametrize("path", sorted(read_display(find_display())))
def test_every_file_has_type_tag_and_policy(served: Served, path: str) -> None:
    answer = served.get(f"/display/{path}")
    assert answer.status == 200
    assert answer.body == (find_display() / path).read_bytes()
    assert answer.headers["content-type"] == TYPES[Path(path).suffix]
    assert answer.headers["cache-control"] == "no-cache"
    assert answer.headers["content-security-policy"].startswith("default-src 'self'; ")
    again = served.get(f"/display/{path}", {"If-None-Match": answer.headers["etag"]})
    assert (again.status, again.body) == (304, b"")
    assert served.get(f"/display/{path}", {"If-None-Match": '"other"'}).status == 200


@pytest.mark.parametrize("path", ["", "none.js", "js", "../../pyproject.toml", "%2e%2e/README.md", "js/../index.html"])
def test_what_is_no_file_of_the_display_is_404(served: Served, path: str) -> None:
    answer = served.get(f"/display/{path}")
    assert answer.status == 404
    answer.problem()


def test_the_plain_page_stays(served: Served) -> None:
    assert b"every call" in served.get("/plain").body


def test_a_checkout_has_its_display_beside_the_service() -> None:
    assert find_display() == ROOT / "clients" / "display"


def test_a_package_without_a_display_says_where_it_looked(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(soundrose, "__file__", str(tmp_path / "a" / "b" / "soundrose" / "__init__.py"))
    with pytest.raises(StartError, match=r"display's index.html is in none of .*install the package anew"):
        find_display()


def test_files_of_other_kinds_are_not_served(tmp_path: Path) -> None:
    (tmp_path / "index.html").write_text("<p>", encoding="utf-8")
    (tmp_path / "notes.md").write_text("-", encoding="utf-8")
    assert list(read_display(tmp_path)) == ["index.html"]
    add_display(FastAPI(), tmp_path)


def test_the_wheel_holds_every_file_where_the_package_looks(tmp_path: Path) -> None:
    command = [sys.executable, "-m", "pip", "wheel", "-q", "--no-deps", "--disable-pip-version-check",
               "--wheel-dir", str(tmp_path), str(ROOT)]  # fmt: skip
    done = subprocess.run(command, capture_output=True, text=True, timeout=110, check=False)
    assert done.returncode == 0, done.stderr
    (wheel,) = tmp_path.glob("*.whl")
    with zipfile.ZipFile(wheel) as file:
        file.extractall(tmp_path / "installed")
    script = "import soundrose.serve.display_files as d; print(d.find_display())"
    found = subprocess.run(
        [sys.executable, "-c", script], cwd=tmp_path, env={"PYTHONPATH": str(tmp_path / "installed")},
        capture_output=True, text=True, timeout=60, check=True,
    )  # fmt: skip
    place = Path(found.stdout.strip())
    assert place == tmp_path / "installed" / "soundrose" / "display"
    mine = {path: file.body for path, file in read_display(find_display()).items()}
    assert {path: file.body for path, file in read_display(place).items()} == mine
