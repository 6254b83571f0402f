"""The one browser-side model: it hosts every view of the Desk and knows nothing of orbits.

Three traits cross to the browser. ``settings`` is what the hand has set, replaced whole and numbered by the
browser; ``scene`` is everything to be shown, in words, digits and figure geometry; ``frame`` holds the long
polylines as float32. The types are those of ``frontend/src/schema/scene.ts``.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import anywidget
import traitlets

_STATIC = Path(__file__).parent / "static"


def built_file(name: str) -> Path:
    """A file of the built front end.

    Raises
    ------
    FileNotFoundError
        The source tree was not built.
    """
    path = _STATIC / name
    if not path.is_file():
        raise FileNotFoundError(
            f"{name} of the front end is missing: install firstarc with pip, or build it in a source tree with "
            "`npm ci && npm run build` in widgets/frontend"
        )
    return path


class Scene(anywidget.AnyWidget):
    """An anywidget that paints a scene and reports settings."""

    _esm = built_file("desk.js")
    _css = built_file("desk.css")

    settings = traitlets.Dict().tag(sync=True)
    scene = traitlets.Dict().tag(sync=True)
    frame = traitlets.Bytes(b"").tag(sync=True)

    def show(self, scene: dict[str, Any], frame: bytes) -> None:
        """Send a scene and its frame in one message."""
        with self.hold_sync():
            self.frame = frame
            self.scene = scene
