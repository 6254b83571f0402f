"""The names of ``import firstarc as fa`` and the package that is also a function."""

from __future__ import annotations

import inspect
import pickle
import subprocess
import sys

import pytest

import firstarc as fa


def fresh(code: str) -> str:
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_all_names_are_there() -> None:
    assert list(fa.__all__) == [*fa._HOME, "__version__"]
    for name in fa.__all__:
        assert getattr(fa, name) is not None
        assert name in dir(fa)
    assert fa.__version__[0].isdigit()
    with pytest.raises(AttributeError, match="no attribute 'prelimnary'"):
        fa.prelimnary  # noqa: B018


def test_preliminary_is_package_and_function() -> None:
    from firstarc import pipeline

    for name in ("preliminary", "fit"):
        package, function = getattr(fa, name), getattr(pipeline, name)
        assert inspect.signature(package) == inspect.signature(function)
        # ``?`` in a notebook shows no signature for a module, so the text opens with it.
        assert package.__doc__.startswith(f"{name}(")
        assert package.__doc__.endswith(function.__doc__)
        assert inspect.ismodule(package)
        assert pickle.loads(pickle.dumps(package)) is package


CALL = """
import firstarc as fa
{before}
try:
    fa.preliminary(None)
except fa.FirstArcError as error:
    print(type(error).__name__)
import firstarc.preliminary.gauss
from firstarc.preliminary import gauss
try:
    fa.preliminary(None)
except fa.FirstArcError as error:
    print(type(error).__name__)
print(callable(gauss.__dict__.get('x', fa.preliminary)), firstarc.preliminary is fa.preliminary)
"""


@pytest.mark.parametrize("before", ["", "import firstarc.preliminary.gauss", "from firstarc import preliminary"])
def test_preliminary_can_be_called_whatever_was_imported_before(before: str) -> None:
    assert fresh(CALL.format(before=before)).split() == ["UsageError", "UsageError", "True", "True"]


def test_loading_a_file_stays_light(tmp_path) -> None:
    path = tmp_path / "night.psv"
    from observing.input_texts import PSV

    path.write_text(PSV)
    code = (
        "import sys, firstarc as fa\n"
        f"obs = fa.load({str(path)!r}); obs.sight_lines; obs.warnings\n"
        "print([m for m in ('astropy', 'scipy', 'pandas', 'matplotlib', 'ipywidgets') if m in sys.modules])"
    )
    assert fresh(code).strip() == "[]"
