"""Step 3: the orbit over all observations.

The package can be called: ``firstarc.fit(obs, ...)`` is :func:`firstarc.pipeline.fit`.
"""

from firstarc.callable_package import make_callable

make_callable(__name__, "firstarc.pipeline", "fit")
