"""Every example notebook runs from a clean copy, and is kept without outputs."""

from __future__ import annotations

import ast
import shutil
from pathlib import Path
from typing import Any

import nbformat
import numpy as np
import pytest

import firstarc as fa
from pipeline.shared_cases import ROOT, invented, sightings_script

FOLDER = ROOT / "example_notebooks"
NOTEBOOKS = sorted(FOLDER.glob("*.ipynb"))
#: Notebooks that show the Desk; the others do all by calls.
WITH_DESK = ("01_first_look.ipynb",)


def test_there_are_notebooks() -> None:
    assert [path.name for path in NOTEBOOKS][:2] == ["01_first_look.ipynb", "02_fit_and_trust.ipynb"]


@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.name)
def test_kept_without_outputs(path: Path) -> None:
    notebook = nbformat.read(path, as_version=4)
    nbformat.validate(notebook)
    assert len(notebook.cells) <= 20
    code = [cell for cell in notebook.cells if cell.cell_type == "code"]
    for cell in code:
        assert cell.outputs == [] and cell.execution_count is None
    assert "widgets" not in notebook.metadata, "no kept widget state"
    assert ("fa.Desk(" in "".join(cell.source for cell in code)) == (path.name in WITH_DESK)
    text = "".join(cell.source for cell in notebook.cells)
    assert "invented" in text and "http://" not in text and "pip install" not in text


def executed(path: Path, folder: Path) -> Any:
    from nbclient import NotebookClient

    for name in ("data", path.name):
        source = FOLDER / name
        if source.is_dir():
            shutil.copytree(source, folder / name)
        else:
            shutil.copy(source, folder / name)
    notebook = nbformat.read(folder / path.name, as_version=4)
    client = NotebookClient(notebook, timeout=180, kernel_name="python3", resources={"metadata": {"path": str(folder)}})
    return client.execute()


def output_text(cell: Any) -> str:
    found = ""
    for output in cell.outputs:
        if output.output_type == "stream":
            found += output.text
        elif output.output_type in ("execute_result", "display_data"):
            found += output.data.get("text/plain", "")
    return found


@pytest.mark.notebook
@pytest.mark.parametrize("path", NOTEBOOKS, ids=lambda path: path.name)
def test_runs_and_proves_that_it_is_repeated(path: Path, tmp_path: Path) -> None:
    notebook = executed(path, tmp_path)
    code = [cell for cell in notebook.cells if cell.cell_type == "code"]
    for cell in code:
        assert not [o for o in cell.outputs if o.output_type == "error"]
        assert not [o for o in cell.outputs if o.output_type == "stream" and o.name == "stderr"], cell.source
    assert output_text(code[-1]) == "True", "the last cell proves that the code gives the same again"
    if path.name not in WITH_DESK:
        return
    assert "exec(desk.code()" in code[-1].source
    printed = next(cell for cell in code if cell.source == "print(desk.code())")
    ast.parse(output_text(printed))
    desks = [
        o.data for cell in code for o in cell.outputs if "application/vnd.jupyter.widget-view+json" in o.get("data", {})
    ]
    assert len(desks) >= 2, "an Earth and a Sun Desk"
    for data in desks:
        assert "<table" in data["text/html"] and "Determined." in data["text/html"]


@pytest.mark.notebook
def test_the_second_notebook_finds_what_was_planted(tmp_path: Path) -> None:
    """The words of the notebook hold: three rejected, two back, the clock within its sigma, one night undetermined."""
    script = sightings_script().SLOW_CLOCK
    notebook = executed(FOLDER / "02_fit_and_trust.ipynb", tmp_path)
    shown = [output_text(cell) for cell in notebook.cells if cell.cell_type == "code"]
    text = "\n".join(shown)
    first = next(out for out in shown if out.startswith("Least-squares orbit about the Earth. Determined."))
    assert first.count(" is out: rejected") == 3 and "are larger than the stated sigmas allow" in first
    assert "consistent   NO" in text
    clock = next(out for out in shown if out.startswith("clock of QLN"))
    value, sigma = (float(part) for part in clock.split("\n")[0].split(":")[1].rstrip(" s").split("±"))
    assert abs(value - script["clock_s"]["QLN"]) < 3.0 * sigma and sigma < 0.05
    assert f"[({script['planted']['sighting'] + 1}, 'rejected: chi-square" in clock and clock.count("rejected") == 1
    assert "The residuals agree with the stated sigmas" in clock
    one_night = next(out for out in shown if "about the Sun. Not determined." in out)
    assert "of the sample" in one_night and "No redundancy" in one_night
    assert any("about the Sun. Determined." in out for out in shown)


@pytest.mark.parametrize("name", ["SATELLITE", "MINOR_PLANET", "SLOW_CLOCK"])
def test_the_data_are_what_their_script_makes(name: str) -> None:
    script = sightings_script()
    scenario = getattr(script, name)
    text = script.csv_text(scenario) if name == "SATELLITE" else script.psv_text(scenario)
    assert (FOLDER / "data" / scenario["file"]).read_text(encoding="utf-8") == text


def test_the_slow_clock_is_made_of_its_forces_clock_and_bad_sighting() -> None:
    """The recorded times put right and the bad sighting apart, the directions are those of the integrated orbit."""
    script = sightings_script()
    scenario = script.SLOW_CLOCK
    late = scenario["clock_s"]["QLN"]
    obs = invented("SLOW_CLOCK")
    lines = obs.with_what_if(fa.WhatIf(clock_s=late, station="QLN")).sight_lines
    apart = np.arccos(np.clip(np.sum(script.directions(scenario, lines) * lines.los, axis=1), -1.0, 1.0))
    sigmas = apart / lines.sigma_rad[:, 0]
    bad = scenario["planted"]["sighting"]
    assert 9.5 < sigmas[bad] < 10.5
    assert np.delete(sigmas, bad).max() < 4.0
    assert obs.center == "earth" and obs.altitude_deg().min() > 20.0 and obs.warnings == ()


@pytest.mark.parametrize("name", ["SATELLITE", "MINOR_PLANET"])
def test_the_invented_sightings_are_of_the_invented_orbit(name: str) -> None:
    """Residuals against the elements of the script: noise of the stated size, objects above their horizons."""
    from firstarc.pipeline import residuals_of

    script = sightings_script()
    obs = invented(name)
    chi = residuals_of(script.true_state(getattr(script, name)), obs) / (np.degrees(obs.sight_lines.sigma_rad) * 3600.0)
    assert np.abs(chi).max() < 3.5
    assert 0.6 < np.sqrt(np.mean(chi**2)) < 1.4
    assert obs.altitude_deg().min() > 10.0
    assert obs.warnings == ()
