"""The shape of the tree: what lies at the top, how long a file may be, and what no file may say."""

from __future__ import annotations

import json
import re
from pathlib import Path

from architecture.tree import ROOT, kept_files

TOP = {
    "README.md", "DEVELOPERS.md", "LICENSE", "pyproject.toml",
    "widgets", "kernel_helpers", "tests", "example_notebooks",
}  # fmt: skip
LIMIT = 600
TEXT = {".py", ".ts", ".mjs", ".js", ".css", ".md", ".toml", ".json", ".ipynb", ".sh", ".npmrc", ""}

#: an address of a package registry, in whatever form (index, mirror, tarball)
HOST = re.compile(
    r"\b(?:registry\.[a-z]\w*\.|files\.py\w+\.|pypi\.(?:org|python)\b|npmjs\.(?:com|org)\b|deb\.debian\.)",
    re.IGNORECASE,
)


FILES = sorted(ROOT / name for name in kept_files())


def text_of(path: Path) -> str:
    return path.read_text(encoding="utf-8", errors="replace")


def test_top_level_is_exactly_what_it_should_be() -> None:
    found = {path.relative_to(ROOT).parts[0] for path in FILES}
    assert {name for name in found if not name.startswith(".")} == TOP


def test_files_are_short() -> None:
    long = {}
    for path in FILES:
        if path.suffix in (".py", ".ts", ".mjs", ".css"):
            lines = text_of(path).count("\n")
            if lines > LIMIT:
                long[str(path.relative_to(ROOT))] = lines
    assert long == {}, f"more than {LIMIT} lines: divide by idea"


def test_no_module_is_called_utils() -> None:
    assert [path.name for path in FILES if path.stem in ("utils", "util", "helpers", "misc", "common")] == []


def test_no_registry_is_named() -> None:
    named = [
        f"{path.relative_to(ROOT)}: {found.group(0)}"
        for path in FILES
        if path.suffix in TEXT
        for found in [HOST.search(text_of(path))]
        if found
    ]
    assert named == []


def test_lock_file_holds_no_addresses_but_hashes() -> None:
    lock = json.loads(text_of(ROOT / "widgets" / "frontend" / "package-lock.json"))
    packages = {name: entry for name, entry in lock["packages"].items() if name}
    assert packages
    assert [name for name, entry in packages.items() if "://" in str(entry.get("resolved", ""))] == []
    assert [name for name, entry in packages.items() if not entry.get("integrity")] == []


def test_notebooks_are_stored_without_outputs() -> None:
    notebooks = [path for path in FILES if path.suffix == ".ipynb"]
    for path in notebooks:
        book = json.loads(text_of(path))
        assert "widgets" not in book["metadata"], path.name
        for cell in book["cells"]:
            assert not cell.get("outputs"), path.name
            assert cell.get("execution_count") is None, path.name
    if (ROOT / "example_notebooks" / "01_first_look.ipynb").exists():
        assert notebooks


def test_no_machine_path_is_named() -> None:
    """A path of one person's machine in a file is a path that is wrong on every other."""
    path_of_someone = re.compile(r"(?<![\w.<])/(?:home|Users|work|root)/[a-z]\w*")
    named = [
        f"{path.relative_to(ROOT)}: {found.group(0)}"
        for path in FILES
        if path.suffix in TEXT
        for found in [path_of_someone.search(text_of(path))]
        if found
    ]
    assert named == []
