"""Who may import whom, and what ``import firstarc`` may load.

Folders of the library are listed here with the folders they may use; a new folder must be added with
a thought. Numbered steps (observing 1, preliminary 2, fit 3, prediction 4, record 5) use earlier ones only.
"""

from __future__ import annotations

import ast
import json
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
KERNEL = ROOT / "kernel_helpers"
WIDGETS = ROOT / "widgets"

BASE = {"constants", "errors", "results"}
#: The numeric core: plain arrays in, plain arrays out.
CORE = {"twobody", "preliminary", "dynamics", "fit", "uncertainty"}
#: Standard modules the core may use: nothing that reads files, the clock or chance.
CORE_STANDARD = {
    "__future__",
    "bisect",
    "collections",
    "dataclasses",
    "enum",
    "functools",
    "itertools",
    "math",
    "numbers",
    "operator",
    "types",
    "typing",
}

#: folder or module of the library -> what of the library it may import
MAY_USE: dict[str, set[str]] = {
    "constants": set(),
    "errors": set(),
    # lets a package carry the name of a public function; knows nothing of orbits
    "callable_package": set(),
    "results": {"report"},
    "report": BASE,
    "border": BASE,
    "formats": BASE,
    "twobody": BASE,
    "dynamics": BASE | {"twobody"},
    "observing": BASE | {"border", "formats", "report", "twobody"},
    "preliminary": BASE | {"callable_package", "twobody", "dynamics", "uncertainty"},
    "fit": BASE | {"callable_package", "twobody", "preliminary", "dynamics", "uncertainty"},
    "uncertainty": BASE | {"twobody", "dynamics"},
    # what the analyst gets back: the core's plain results with epochs, frames and words
    "determination": BASE | CORE | {"border", "observing", "report"},
    "prediction": BASE | CORE | {"border", "observing", "report", "determination"},
    "record": BASE | CORE | {"border", "formats", "observing", "report", "determination", "prediction"},
}
#: the only module that imports the whole way
MAY_USE["pipeline"] = set(MAY_USE)

#: Loaded only when used: they cost more than everything else together.
HEAVY = {
    "anywidget", "astropy", "boinor", "dask", "erfa", "ipywidgets", "jplephem",
    "matplotlib", "pandas", "poliastro", "scipy", "traitlets",
}  # fmt: skip


def sources(folder: Path) -> list[Path]:
    """Python files under a folder, without following links."""
    found = [path for path in folder.rglob("*.py") if "node_modules" not in path.parts]
    return sorted(path for path in found if (KERNEL / "widgets") not in path.parents)


def dotted(path: Path) -> str:
    """Import name of a file of the library."""
    if WIDGETS in path.parents:
        parts = ["firstarc", "widgets", *path.relative_to(WIDGETS).with_suffix("").parts]
    else:
        parts = ["firstarc", *path.relative_to(KERNEL).with_suffix("").parts]
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imported(path: Path, name: str, text: str | None = None) -> Iterator[tuple[int, str]]:
    """(line, absolute dotted name) of everything a file imports, at the top or inside a function."""
    tree = ast.parse(path.read_text(encoding="utf-8") if text is None else text)
    package = name if path.name == "__init__.py" else name.rpartition(".")[0]
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield node.lineno, alias.name
        elif isinstance(node, ast.ImportFrom):
            base = node.module or ""
            if node.level:
                above = package.split(".")[: len(package.split(".")) - (node.level - 1)]
                base = ".".join([*above, *([node.module] if node.module else [])])
            for alias in node.names:
                yield node.lineno, f"{base}.{alias.name}"
        elif isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute | ast.Name):
            called = node.func.attr if isinstance(node.func, ast.Attribute) else node.func.id
            argument = node.args[0] if node.args else None
            if called in ("import_module", "__import__") and isinstance(argument, ast.Constant):
                yield node.lineno, str(argument.value)


def wrong_imports(path: Path, name: str, text: str | None = None) -> list[str]:
    """Every import of one file of the library that its place does not allow."""
    parts = name.split(".")
    if len(parts) == 1:  # firstarc/__init__.py: lazy names only
        return [
            f"{name}:{line} imports {what} when firstarc is imported"
            for line, what in imported(path, name, text)
            if what.split(".")[0] in HEAVY
        ]
    here = parts[1]
    wrong = []
    for line, what in imported(path, name, text):
        head, *rest = what.split(".")
        if head in ("kernel_helpers", "widgets"):
            wrong.append(f"{name}:{line} imports {what}: a second copy would load; say firstarc")
        elif head == "firstarc" and rest:
            target = rest[0]
            if here == "widgets":
                if target != "widgets" and any(re.match("_[^_]", part) for part in rest):
                    wrong.append(f"{name}:{line} imports {what}: widgets use public names only")
            elif target == "widgets":
                wrong.append(f"{name}:{line} imports {what}: the kernel side knows no widgets")
            elif target in MAY_USE and target != here and target not in MAY_USE.get(here, set()):
                wrong.append(f"{name}:{line} imports {what}: {here} may not use {target}")
        elif here in CORE and head not in CORE_STANDARD | {"numpy", "scipy", "firstarc"}:
            wrong.append(f"{name}:{line} imports {what}: the numeric core uses numpy and scipy only")
    return wrong


LIBRARY = [*sources(KERNEL), *sources(WIDGETS)]


@pytest.mark.parametrize("path", LIBRARY, ids=dotted)
def test_imports_go_one_way(path: Path) -> None:
    assert wrong_imports(path, dotted(path)) == []


def test_the_library_is_found() -> None:
    assert {dotted(path) for path in LIBRARY} >= {"firstarc.constants", "firstarc.errors", "firstarc.results"}


def test_every_folder_has_a_place_in_the_map() -> None:
    found = {dotted(path).split(".")[1] for path in sources(KERNEL) if dotted(path) != "firstarc"}
    assert found <= set(MAY_USE), "add the new folder, with what it may use, to MAY_USE and to DEVELOPERS.md"


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("firstarc.twobody.kepler", "from astropy.time import Time"),
        ("firstarc.twobody.kepler", "import time"),
        ("firstarc.twobody.kepler", "def f():\n    from ..preliminary import gauss"),
        ("firstarc.preliminary.gauss", "from firstarc.fit import least_squares"),
        ("firstarc.preliminary.gauss", "import firstarc.border.timescales"),
        ("firstarc.preliminary.gauss", "import pathlib"),
        ("firstarc.observing.load", "import firstarc.prediction"),
        ("firstarc.report.text", "from firstarc.widgets import desk"),
        ("firstarc.report.text", "import importlib\nimportlib.import_module('firstarc.widgets')"),
        ("firstarc.widgets.desk", "import kernel_helpers"),
        ("firstarc.widgets.desk", "from firstarc.pipeline import _private"),
        ("firstarc", "import scipy.optimize"),
    ],
)
def test_the_check_sees_a_wrong_import(name: str, text: str) -> None:
    path = Path("__init__.py" if name == "firstarc" else "module.py")
    assert len(wrong_imports(path, name, text)) == 1


CORE_FILES = [path for path in LIBRARY if dotted(path).split(".")[1:2] and dotted(path).split(".")[1] in CORE]


@pytest.mark.parametrize("path", CORE_FILES, ids=dotted)
def test_core_neither_prints_nor_opens(path: Path) -> None:
    calls = [
        f"line {node.lineno}: {node.func.id}()"
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id in ("print", "open", "input", "eval", "exec")
    ]
    assert calls == []


def test_no_test_and_no_notebook_imports_a_second_copy() -> None:
    wrong = []
    for path in sources(ROOT / "tests"):
        for line, what in imported(path, "tests." + path.stem):
            if what.split(".")[0] in ("kernel_helpers", "widgets"):
                wrong.append(f"{path.relative_to(ROOT)}:{line} imports {what}")
    for path in sorted((ROOT / "example_notebooks").rglob("*.ipynb")):
        for cell in json.loads(path.read_text(encoding="utf-8"))["cells"]:
            text = "".join(cell["source"])
            if "import kernel_helpers" in text or "import widgets" in text or "from kernel_helpers" in text:
                wrong.append(f"{path.name}: {text[:60]}")
    assert wrong == []


def in_fresh_python(code: str) -> str:
    """What a new interpreter prints for some code."""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_import_firstarc_loads_nothing_heavy() -> None:
    loaded = in_fresh_python("import sys, firstarc; print(*sorted({m.partition('.')[0] for m in sys.modules}))")
    names = set(loaded.split())
    assert "firstarc" in names
    assert names & HEAVY == set()


def test_public_names_are_found_lazily() -> None:
    printed = in_fresh_python(
        "import firstarc\n"
        "assert firstarc.__all__ and set(firstarc.__all__) <= set(dir(firstarc))\n"
        "for name in firstarc.__all__:\n"
        "    getattr(firstarc, name)\n"
        "print(len(firstarc.__all__))\n"
        "try:\n"
        "    firstarc.no_such_name\n"
        "except AttributeError as error:\n"
        "    print(error)\n"
    )
    count, said = printed.splitlines()
    assert int(count) >= 1
    assert "no_such_name" in said


def test_every_module_can_be_imported_first() -> None:
    """No module leans on another having been imported before it (a hidden circle)."""
    names = [dotted(path) for path in LIBRARY]
    in_fresh_python(
        "import importlib, sys\n"
        f"for name in {names!r}:\n"
        "    for old in [m for m in sys.modules if m.partition('.')[0] == 'firstarc']:\n"
        "        del sys.modules[old]\n"
        "    try:\n"
        "        importlib.import_module(name)\n"
        "    except Exception as error:\n"
        "        raise SystemExit(f'{name} does not import on its own: {error!r}')\n"
    )
