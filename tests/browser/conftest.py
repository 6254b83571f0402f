"""Fixtures of the browser tests."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from browser.lab_session import CHROMIUM_ARGUMENTS, Lab, Notebook, open_and_run, running_lab


@pytest.fixture(scope="session")
def lab(tmp_path_factory: pytest.TempPathFactory, project_root: Path) -> Iterator[Lab]:
    folder, home = tmp_path_factory.mktemp("lab-notebooks"), tmp_path_factory.mktemp("lab-home")
    with running_lab(folder, home, project_root / "example_notebooks") as running:
        yield running


@pytest.fixture(scope="session")
def browser(chromium: str) -> Iterator[Any]:
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=chromium, args=CHROMIUM_ARGUMENTS)
        yield started
        started.close()


@pytest.fixture
def run_notebook(lab: Lab, browser: Any) -> Iterator[Callable[..., Notebook]]:
    """Opens a notebook of the lab, runs all its cells and waits for its Desks; fails on any page error."""
    opened: list[tuple[Any, Notebook]] = []

    def run(name: str, width: int = 1280, desks: int = 1) -> Notebook:
        context = browser.new_context(viewport={"width": width, "height": 1400})
        notebook = open_and_run(context.new_page(), lab, name, desks)
        opened.append((context, notebook))
        return notebook

    yield run
    for context, notebook in opened:
        context.close()
        assert notebook.errors == []
