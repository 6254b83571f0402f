"""The distributions: built from a clean copy, compared with the tree and with each other, installed.

Everything is built without an isolated environment, with the tools of the ``test`` extra, so that
nothing but the front end's locked packages is fetched.
"""

from __future__ import annotations

import email
import os
import re
import shutil
import subprocess
import sys
import tarfile
import venv
import zipfile
from dataclasses import dataclass
from pathlib import Path

import pytest

from architecture.tree import BUILT, ROOT, kept_files

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

pytestmark = [pytest.mark.wheel, pytest.mark.slow]

PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]


def copy_of_tree(to: Path) -> Path:
    for name in sorted(kept_files()):
        (to / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy2(ROOT / name, to / name)
    return to


def environment(**changes: str) -> dict[str, str]:
    """The caller's environment with the tools of this Python first on the path."""
    path = os.pathsep.join([str(Path(sys.executable).parent), os.environ.get("PATH", "")])
    return {**os.environ, "PATH": path, **changes}


def build(source: Path, kind: str, to: Path, **changes: str) -> subprocess.CompletedProcess[str]:
    command = [
        sys.executable,
        "-m",
        "build",
        f"--{kind}",
        "--no-isolation",
        "--skip-dependency-check",
        "--outdir",
        str(to),
        str(source),
    ]
    return subprocess.run(
        command, capture_output=True, text=True, check=False, env=environment(**changes), cwd=to.parent
    )


def built(source: Path, kind: str, to: Path, **changes: str) -> Path:
    done = build(source, kind, to, **changes)
    assert done.returncode == 0, done.stdout[-4000:] + done.stderr[-4000:]
    (made,) = to.glob("*.whl" if kind == "wheel" else "*.tar.gz")
    return made


def members(wheel: Path) -> dict[str, bytes]:
    with zipfile.ZipFile(wheel) as archive:
        return {name: archive.read(name) for name in archive.namelist()}


@dataclass(frozen=True)
class Made:
    tree: Path
    wheel: Path
    sdist: Path
    unpacked: Path


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Made:
    """A clean copy of the tree with the links of an editable install (the harder case), and its builds."""
    base = tmp_path_factory.mktemp("distributions")
    tree = copy_of_tree(base / "tree")
    (tree / ".dev").mkdir()
    (tree / ".dev" / "firstarc").symlink_to("../kernel_helpers")
    (tree / "kernel_helpers" / "widgets").symlink_to("../widgets")
    wheel = built(tree, "wheel", base / "from-tree")
    sdist = built(tree, "sdist", base / "sdist")
    with tarfile.open(sdist) as archive:
        if hasattr(tarfile, "data_filter"):
            archive.extractall(base / "unpacked", filter="data")
        else:
            archive.extractall(base / "unpacked")
    (unpacked,) = (base / "unpacked").iterdir()
    return Made(tree, wheel, sdist, unpacked)


def test_wheel_holds_the_tree_and_nothing_else(made: Made) -> None:
    expected = {}
    for name in kept_files() | BUILT:
        if name.startswith("kernel_helpers/"):
            expected["firstarc/" + name.removeprefix("kernel_helpers/")] = name
        elif name.startswith("widgets/") and not name.startswith("widgets/frontend/"):
            expected["firstarc/" + name] = name
    found = members(made.wheel)
    info = f"firstarc-{PROJECT['version']}.dist-info/"
    metadata = {info + name for name in ("METADATA", "WHEEL", "RECORD", "licenses/LICENSE")}
    assert set(found) == set(expected) | metadata
    assert {"firstarc/__init__.py", "firstarc/py.typed", "firstarc/widgets/static/desk.js"} <= set(found)
    for there, here in expected.items():
        assert found[there] == (made.tree / here).read_bytes(), there
    assert len(found["firstarc/widgets/static/desk.js"]) > 1000


def test_sdist_holds_the_project_and_nothing_else(made: Made) -> None:
    found = {path.relative_to(made.unpacked).as_posix() for path in made.unpacked.rglob("*") if path.is_file()}
    assert found == kept_files() | BUILT | {"PKG-INFO"}


def test_wheel_from_sdist_equals_wheel_from_tree_and_needs_no_npm(made: Made, tmp_path: Path) -> None:
    no_npm = tmp_path / "bin"
    no_npm.mkdir()
    (no_npm / "npm").write_text("#!/bin/sh\necho 'npm was called' >&2\nexit 1\n")
    (no_npm / "npm").chmod(0o755)
    path = os.pathsep.join([str(no_npm), str(Path(sys.executable).parent), os.environ.get("PATH", "")])
    again = built(made.unpacked, "wheel", tmp_path / "from-sdist", PATH=path)
    assert again.name == made.wheel.name
    assert members(again) == members(made.wheel)


def test_front_end_that_does_not_build_is_named(made: Made, tmp_path: Path) -> None:
    tree = copy_of_tree(tmp_path / "tree")
    shutil.copytree(made.tree / "widgets/frontend/node_modules", tree / "widgets/frontend/node_modules", symlinks=True)
    (tree / "widgets/frontend/src/desk.ts").write_text("export default { render( {\n")
    done = build(tree, "wheel", tmp_path / "out")
    assert done.returncode != 0
    assert "firstarc's browser side cannot be built: 'npm run build' in widgets/frontend" in done.stdout + done.stderr
    assert not list((tmp_path / "out").glob("*.whl"))


def test_missing_npm_is_named(tmp_path: Path) -> None:
    tree = copy_of_tree(tmp_path / "tree")
    empty = tmp_path / "empty"
    empty.mkdir()
    done = build(tree, "wheel", tmp_path / "out", PATH=str(empty))
    assert done.returncode != 0
    assert "there is no npm" in done.stdout + done.stderr


def empty_environment(folder: Path) -> Path:
    """A new virtual environment without any package; its Python."""
    venv.create(folder, with_pip=False, symlinks=os.name != "nt")
    return folder / ("Scripts/python.exe" if os.name == "nt" else "bin/python")


def pip_install(python: Path, wheel: Path) -> None:
    command = [
        sys.executable,
        "-m",
        "pip",
        "--python",
        str(python),
        "install",
        "--no-deps",
        "--no-index",
        str(wheel),
    ]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr


def printed_by(python: Path, code: str, cwd: Path) -> list[str]:
    done = subprocess.run([str(python), "-c", code], capture_output=True, text=True, check=False, cwd=cwd)
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()


def test_wheel_imports_in_an_empty_environment(made: Made, tmp_path: Path) -> None:
    """``import firstarc`` itself needs no dependency: everything is looked up when it is used."""
    python = empty_environment(tmp_path / "env")
    pip_install(python, made.wheel)
    code = (
        "import importlib.metadata, importlib.resources, firstarc\n"
        "print(firstarc.__file__)\n"
        "print(importlib.metadata.version('firstarc'))\n"
        "print(importlib.resources.files('firstarc').joinpath('widgets/static/desk.css').is_file())\n"
        "print(importlib.resources.files('firstarc').joinpath('py.typed').is_file())\n"
    )
    where, version, styled, typed = printed_by(python, code, tmp_path)
    assert Path(where).is_relative_to(tmp_path / "env")
    assert (version, styled, typed) == (PROJECT["version"], "True", "True")


def test_editable_install_is_live(made: Made, tmp_path: Path) -> None:
    tree = copy_of_tree(tmp_path / "tree")
    shutil.copytree(made.tree / "widgets/frontend/node_modules", tree / "widgets/frontend/node_modules", symlinks=True)
    out = tmp_path / "out"
    out.mkdir()
    code = f"import hatchling.build as b; print(b.build_editable({str(out)!r}))"
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False, cwd=tree, env=environment()
    )
    assert done.returncode == 0, done.stdout + done.stderr
    python = empty_environment(tmp_path / "env")
    (wheel,) = out.glob("*.whl")
    pip_install(python, wheel)
    (tree / "kernel_helpers" / "added_later.py").write_text("FOUND = 'kernel side'\n")
    (tree / "widgets" / "added_later.py").write_text("FOUND = 'widgets'\n")
    code = (
        "import importlib.util, firstarc.added_later\n"
        "print(firstarc.added_later.FOUND)\n"
        "print(importlib.util.find_spec('firstarc.widgets.added_later') is not None)\n"
        "print(firstarc.__file__)\n"
    )
    said, found, where = printed_by(python, code, tmp_path)
    assert (said, found) == ("kernel side", "True")
    assert Path(where).resolve() == (tree / "kernel_helpers" / "__init__.py").resolve()


def test_metadata(made: Made) -> None:
    (name,) = [name for name in members(made.wheel) if name.endswith("/METADATA")]
    said = email.message_from_bytes(members(made.wheel)[name])
    assert (said["Name"], said["Version"]) == ("firstarc", PROJECT["version"])
    assert said["License-Expression"] == "BSD-3-Clause"
    assert said["Requires-Python"] == ">=3.10"
    assert said["Description-Content-Type"] == "text/markdown"
    assert said.get_all("Project-URL") is None
    required = said.get_all("Requires-Dist") or []
    assert {re.split(r"[^A-Za-z0-9._-]", text)[0] for text in required if "extra ==" not in text} == {
        re.split(r"[^A-Za-z0-9._-]", text)[0] for text in PROJECT["dependencies"]
    }
    for text in required:
        bound = text.partition(";")[0]
        assert not re.search(r"<|==|~=|!=|@", bound), f"{text}: lower bounds only"
    for word, marker in (("poliastro", "python_version < '3.11'"), ("boinor", "python_version >= '3.11'")):
        (text,) = [text for text in required if text.startswith(word)]
        assert marker in text
    assert {"test", "de440"} <= set(said.get_all("Provides-Extra") or [])
