"""The house: which room may import which, what the core never touches, what the top level holds."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
SERVICE = ROOT / "service" / "soundrose"
CLIENT = ROOT / "clients" / "python" / "soundrose_client"
FILES = sorted([*SERVICE.rglob("*.py"), *CLIENT.rglob("*.py")])
LAYERS = ("core:", "codec:", "process:")
BANNED_IN_CORE = {
    "asyncio",
    "logging",
    "os",
    "pathlib",
    "random",
    "socket",
    "subprocess",
    "sys",
    "threading",
    "time",
    "zmq",
}
#: a room imports only itself, what stands lower, and what stands under all
ORDER = ["array", "feed", "beam", "contact", "pipeline", "scene", "serve", "supervise", "cli"]
UNDER_ALL = {"errors", "_version", "settings_types", "settings", "product", "child", "garbage", "store"}
SAME_HEIGHT = {
    "children": "supervise",
    "notify": "supervise",
    "status": "supervise",
    "worker": "supervise",
    "check": "cli",
    "bench": "cli",
}


def name(path: Path) -> str:
    return str(path.relative_to(ROOT))


def imported(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{name(path)}: relative import"
            found.add(node.module or "")
            found.update(f"{node.module}.{alias.name}" for alias in node.names)
    return found


def room(module: str) -> str:
    part = module.split(".")[1] if "." in module else ""
    return SAME_HEIGHT.get(part, "settings" if part.startswith("settings") else part)


def layer(path: Path) -> str:
    return (ast.get_docstring(ast.parse(path.read_text())) or "").split()[0]


@pytest.mark.parametrize("path", FILES, ids=name)
def test_file_says_its_layer(path):
    if path.name == "__init__.py" and len(path.read_text()) < 200:
        return  # a room's door: no code
    assert layer(path) in LAYERS, f"{name(path)} must begin with one of {LAYERS}"


@pytest.mark.parametrize("path", [path for path in FILES if path.read_text().startswith('"""core:')], ids=name)
def test_core_is_pure(path):
    roots = {module.split(".")[0] for module in imported(path)}
    assert not roots & BANNED_IN_CORE


@pytest.mark.parametrize("path", [path for path in FILES if SERVICE in path.parents], ids=name)
def test_imports_run_one_way(path):
    here = room("soundrose." + str(path.relative_to(SERVICE)).removesuffix(".py").replace("/", "."))
    if here in ("__main__", "", "__init__") or path.stem in ("worker", "__main__"):
        return  # the doors, which lead everywhere
    for module in imported(path):
        if not module.startswith("soundrose."):
            continue
        there = room(module)
        if here in UNDER_ALL:
            allowed = UNDER_ALL | ({"array"} if here == "settings" else set())
            assert there in allowed, f"{name(path)} stands under all and imports {module}"
        elif there not in UNDER_ALL:
            assert there == here or ORDER.index(there) < ORDER.index(here), f"{name(path)} imports {module}"


@pytest.mark.parametrize("path", [path for path in FILES if CLIENT in path.parents], ids=name)
def test_client_needs_nothing_of_the_service(path):
    roots = {module.split(".")[0] for module in imported(path)}
    assert "soundrose" not in roots


def test_outside_tests_speak_the_contract_only():
    for path in sorted((ROOT / "tests" / "process").rglob("*.py")):
        roots = {module.split(".")[0] for module in imported(path)}
        assert not roots & {"soundrose", "soundrose_client"}, name(path)


@pytest.mark.parametrize("path", FILES, ids=name)
def test_file_is_short_enough_to_review_whole(path):
    assert len(path.read_text().splitlines()) <= 450


def test_top_level_is_what_it_should_be():
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "service", "clients", "tests", "deploy", "docs"}
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    assert found - {"soundrose-data", "build", "dist"} <= allowed


def test_no_owner_less_names():
    assert not {path.stem for path in FILES} & {"utils", "util", "helpers", "common", "misc"}


#: the host's clock is read only to stamp what is shown or kept; intervals come from the monotonic clock
STAMPS = {"supervise.py", "children.py", "command.py", "source.py", "process.py"}


@pytest.mark.parametrize("path", FILES, ids=name)
def test_host_clock_measures_nothing(path):
    text = path.read_text()
    assert "time.time()" not in text
    assert "datetime.now" not in text
    assert "time_ns()" not in text.replace("monotonic_ns()", "") or path.name in STAMPS
