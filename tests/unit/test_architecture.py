"""The shape of the program: who may import whom, and what may lie where."""

import ast
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
PACKAGE = ROOT / "pipeline" / "latelight"
STAGES = {
    "frames", "registration", "matching", "stacking", "subtraction", "arcs", "motion",
    "origin",
}  # fmt: skip
TOP = {"__init__", "__main__", "cli", "commands", "config", "night", "reports"}
# Modules beside the packages: what the stages share.
FOUNDATION = {path.stem for path in PACKAGE.glob("*.py")} - TOP | {"records"}
# What each part may import besides itself; night, reports, config and the commands
# know everything.
ALLOWED = {
    **dict.fromkeys(STAGES | FOUNDATION | {"echo", "products"}, FOUNDATION),
    "origin": FOUNDATION | {"echo"},
    "forecast": FOUNDATION | {"echo"},
    "planning": FOUNDATION | {"echo"},
    "simulation": FOUNDATION | {"echo"},
    "recovery": FOUNDATION | {"simulation", "echo"},
}
LIGHT = {"__future__", "typing", "pydantic", "latelight.settings"}


def modules():
    return sorted(PACKAGE.rglob("*.py"))


def name_of(path):
    return ".".join(path.relative_to(PACKAGE).with_suffix("").parts)


def tree_of(path):
    return ast.parse(path.read_text(encoding="utf-8"))


def imports_of(path):
    """Yield the dotted name of everything a module imports, at any depth."""
    for node in ast.walk(tree_of(path)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: import by the full name"
            yield node.module or ""


def parts_imported(path):
    """Return the parts of the package that a module imports."""
    found = set()
    for name in imports_of(path):
        words = name.split(".")
        if words[0] == "latelight" and len(words) > 1:
            found.add(words[1])
    return found


@pytest.mark.parametrize("path", modules(), ids=name_of)
def test_parts_import_only_what_they_may(path):
    part = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    if part in TOP:
        return
    assert parts_imported(path) <= ALLOWED[part] | {part}


@pytest.mark.parametrize("path", sorted(PACKAGE.rglob("settings.py")), ids=name_of)
def test_settings_modules_are_light(path):
    assert set(imports_of(path)) <= LIGHT


@pytest.mark.parametrize("path", modules(), ids=name_of)
def test_only_the_commands_print(path):
    if path.name == "cli.py" or path.parent.name == "commands":
        return
    calls = [n.func for n in ast.walk(tree_of(path)) if isinstance(n, ast.Call)]
    assert not [f for f in calls if isinstance(f, ast.Name) and f.id == "print"]


@pytest.mark.parametrize(
    "path",
    [p for p in modules() if p.relative_to(PACKAGE).parts[0] in STAGES],
    ids=name_of,
)
def test_stages_log_nothing(path):
    assert "logging" not in set(imports_of(path))


@pytest.mark.parametrize("path", modules(), ids=name_of)
def test_modules_open_with_a_docstring(path):
    tree = tree_of(path)
    assert ast.get_docstring(tree)
    if path.name == "__init__.py" and path.parent not in (PACKAGE, PACKAGE / "records"):
        assert len(tree.body) == 1


def test_the_top_level_is_fixed():
    listed = subprocess.run(
        ["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    if listed.returncode != 0:
        pytest.skip("not a git checkout")
    top = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {name for name in top if not name.startswith(".")} <= {
        "README.md", "DEVELOPERS.md", "pyproject.toml", "pipeline", "configs", "tests",
        "sample_frames",
    }  # fmt: skip
    assert not (ROOT / "pipeline" / "__init__.py").exists()


def test_the_repository_speaks_of_no_machine():
    words = re.compile(r"/(?:work|tmp|home|root|Users)/\w+|\.\./shared")
    text_files = [
        path
        for folder in ("pipeline", "tests", "configs", ".ci")
        for path in (ROOT / folder).rglob("*")
        if path.suffix in {".py", ".toml", ".md", ""} and path.is_file()
    ]
    text_files += [ROOT / n for n in ("README.md", "DEVELOPERS.md", "pyproject.toml")]
    found = [
        f"{path.relative_to(ROOT)}: {match.group()}"
        for path in text_files
        if path.exists() and path != Path(__file__)
        for match in [words.search(path.read_text(encoding="utf-8"))]
        if match
    ]
    assert not found


def test_help_loads_nothing_heavy():
    code = (
        "import sys; from latelight import cli; cli._parser().format_help(); "
        "heavy = {'numpy', 'scipy', 'astropy', 'pydantic', 'numba'}; "
        "print(sorted(heavy & set(sys.modules)))"
    )
    said = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    assert said.stdout.strip() == "[]"
