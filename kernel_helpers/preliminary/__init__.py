"""Step 2: preliminary orbits from three observations.

The package can be called: ``firstarc.preliminary(obs, ...)`` is :func:`firstarc.pipeline.preliminary`.
"""

from firstarc.callable_package import make_callable

make_callable(__name__, "firstarc.pipeline", "preliminary")
