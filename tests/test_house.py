"""The house keeps its own rules: imports run one way, the board's half imports only what boards have, versions agree."""

from __future__ import annotations

import ast
import json
import re
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
WINGS = ("units", "strapping", "settings", "book", "intake", "figures", "findings", "papers", "page", "field", "demo", "cli")
EVERY_BOARD = {
    "math",
    "micropython",
    "array",
    "struct",
    "gc",
    "time",
    "sys",
    "os",
    "binascii",
    "select",
    "socket",
    "json",
    "hashlib",
}
BOARDS_OWN = {"ssl", "machine"}  # imported where they are needed, by what only a board with them runs
COMPANION = sorted((ROOT / "companion").rglob("*.py"))
CORE = sorted((ROOT / "core_mp").rglob("*.py"))


def imports_of(path: Path) -> set[str]:
    names = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            names.add(node.module or "")
    return names


@pytest.mark.parametrize("path", COMPANION, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_wing_imports_only_wings_before_it(path: Path) -> None:
    parts = path.relative_to(ROOT / "companion").with_suffix("").parts
    own = WINGS.index(parts[0]) if parts[0] in WINGS else -1
    for name in imports_of(path):
        if name.startswith("companion."):
            assert WINGS.index(name.split(".")[1]) <= own, f"{path}: imports {name}"


@pytest.mark.parametrize("path", CORE, ids=lambda path: path.name)
def test_the_loggers_half_imports_only_what_every_board_has(path: Path) -> None:
    own = {other.stem for other in CORE}  # by their bare names on a board whose file system has no folders
    assert {name for name in imports_of(path) if not name.startswith("core_mp")} <= EVERY_BOARD | own | (
        BOARDS_OWN if path.name == "start.py" else set()
    )


def test_every_public_function_says_what_it_does() -> None:
    silent = []
    for path in (*COMPANION, *CORE):
        tree = ast.parse(path.read_text())
        silent += [] if ast.get_docstring(tree) else [str(path)]
        bodies = [tree.body, *(node.body for node in tree.body if isinstance(node, ast.ClassDef))]
        for node in (node for body in bodies for node in body if isinstance(node, (ast.FunctionDef, ast.ClassDef))):
            if not node.name.startswith("_") and not ast.get_docstring(node):
                silent.append(f"{path.relative_to(ROOT)}: {node.name}")
    assert not silent


def test_the_boards_package_lists_every_file() -> None:
    package = json.loads((ROOT / "core_mp/package.json").read_text())
    assert package["urls"] == [
        [f"core_mp/{name}", name] for name in (path.relative_to(ROOT / "core_mp").as_posix() for path in CORE)
    ]
    assert package["version"] == tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]


def test_changelog_and_version_agree() -> None:
    version = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
    assert re.findall(r"^## (\S+)", (ROOT / "CHANGELOG.md").read_text(), re.M)[0] == version


def test_every_command_and_every_status_word_stands_in_the_readme() -> None:
    from companion import cli
    from core_mp.settings import RANGES
    from core_mp.status import WORDS

    readme = (ROOT / "README.md").read_text()
    for name in re.findall(r'add\("([a-z]+)",', Path(cli.__file__).read_text()):
        assert f"levelbook {name}" in readme, name
    for word in WORDS:
        assert f"`{word}`" in readme, word
    board = (ROOT / "core_mp/README.md").read_text()
    for key in RANGES:
        assert f"`{key}`" in board, key


def test_every_wing_has_a_page() -> None:
    for folder in {path.parent for path in (*COMPANION, *CORE)} - {ROOT / "companion"}:
        assert (folder / "README.md").is_file(), folder


def test_the_top_level_holds_what_the_map_says_and_nothing_else() -> None:
    import subprocess

    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if listed.returncode:
        pytest.skip("not a git checkout")
    top = {name.split("/")[0] for name in listed.stdout.split("\n") if name and not name.startswith(".")}
    assert top <= {
        "README.md",
        "DEVELOPERS.md",
        "CHANGELOG.md",
        "LICENSE",
        "Makefile",
        "pyproject.toml",
        "core_mp",
        "companion",
        "tests",
        "configs",
        "examples",
    }


def test_a_notebook_gets_its_few_names_and_pays_for_none_before() -> None:
    import subprocess
    import sys

    program = "import sys, companion\nassert not {'numpy', 'pandas', 'pint'} & set(sys.modules)\nfor name in companion.__all__: assert callable(getattr(companion, name)), name"
    subprocess.run([sys.executable, "-c", program], cwd=ROOT, check=True)


def test_help_loads_nothing_heavy() -> None:
    import subprocess
    import sys

    program = "import sys\nfrom companion.cli import main\ntry: main(['--help'])\nexcept SystemExit: pass\nassert not {'numpy', 'pandas', 'pint', 'matplotlib', 'paho'} & set(sys.modules)"
    subprocess.run([sys.executable, "-c", program], cwd=ROOT, check=True, capture_output=True)
