"""A JupyterLab of one's own and a notebook open in it: for the browser tests and for the slider benchmark."""

from __future__ import annotations

import json
import os
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import nbformat

TOKEN = "browser-tests"
IDLE = """() => {
  const session = window.jupyterapp?.shell?.currentWidget?.sessionContext?.session;
  return session?.kernel?.connectionStatus === "connected" && session.kernel.status === "idle";
}"""


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@dataclass
class Lab:
    """A running JupyterLab over one folder."""

    url: str
    folder: Path

    def write(self, name: str, *cells: str) -> str:
        """A notebook with these code cells."""
        book = nbformat.v4.new_notebook(cells=[nbformat.v4.new_code_cell(cell) for cell in cells])
        book.metadata["kernelspec"] = {"name": "python3", "display_name": "Python 3", "language": "python"}
        nbformat.write(book, self.folder / name)
        return name


CHROMIUM_ARGUMENTS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--disable-background-networking",
]


@contextmanager
def running_lab(folder: Path, home: Path, examples: Path) -> Iterator[Lab]:
    """JupyterLab over ``folder``, which gets a copy of the examples; all settings in ``home``."""
    for source in examples.rglob("*"):
        if source.is_file() and not {".ipynb_checkpoints", "__pycache__"} & set(source.parts):
            target = folder / source.relative_to(examples)
            target.parent.mkdir(parents=True, exist_ok=True)
            target.write_bytes(source.read_bytes())
    names = ("CONFIG_DIR", "DATA_DIR", "RUNTIME_DIR")
    env = dict(os.environ, HOME=str(home), IPYTHONDIR=str(home / "ipython"))
    env |= {f"JUPYTER_{name}": str(home / name) for name in names}
    env |= {f"JUPYTERLAB_{name}": str(home / name) for name in ("SETTINGS_DIR", "WORKSPACES_DIR")}
    quiet = home / "SETTINGS_DIR" / "@jupyterlab" / "apputils-extension"
    quiet.mkdir(parents=True)
    (quiet / "notification.jupyterlab-settings").write_text('{"fetchNews": "false", "checkForUpdates": false}')
    (home / "CONFIG_DIR").mkdir()
    (home / "CONFIG_DIR" / "jupyter_lab_config.py").write_text("c.LabApp.expose_app_in_browser = True\n")
    port = free_port()
    log = (home / "lab.log").open("w")
    command = [sys.executable, "-m", "jupyter", "lab", "--no-browser", "--ip=127.0.0.1", f"--port={port}"]
    command += ["--ServerApp.port_retries=0", f"--IdentityProvider.token={TOKEN}", f"--ServerApp.root_dir={folder}"]
    if hasattr(os, "geteuid") and os.geteuid() == 0:
        command.append("--allow-root")
    server = subprocess.Popen(command, env=env, stdout=log, stderr=subprocess.STDOUT)
    url = f"http://127.0.0.1:{port}"
    try:
        for _ in range(300):
            assert server.poll() is None, (home / "lab.log").read_text()
            try:
                with urllib.request.urlopen(f"{url}/api/status?token={TOKEN}", timeout=2):
                    break
            except OSError:
                time.sleep(0.2)
        else:
            raise TimeoutError("JupyterLab did not answer within 60 s:\n" + (home / "lab.log").read_text())
        yield Lab(url, folder)
    finally:
        server.terminate()
        try:
            server.wait(20)
        except subprocess.TimeoutExpired:
            server.kill()
        log.close()


@dataclass
class Notebook:
    """A notebook open in the page, with everything run."""

    page: Any
    errors: list[str] = field(default_factory=list)

    def desk(self, index: int = 0) -> Any:
        return self.page.locator(".fa[data-fa-seq]").nth(index)

    def python(self, code: str) -> Any:
        """Run code in the notebook's kernel, out of sight; the value of its last ``answer = ...`` as JSON."""
        script = f"{code}\nimport json as _json\nprint('ANSWER' + _json.dumps(answer))"
        text = self.page.evaluate(
            """async (code) => {
              const kernel = window.jupyterapp.shell.currentWidget.sessionContext.session.kernel;
              const future = kernel.requestExecute({code, store_history: false, silent: false});
              let out = "";
              future.onIOPub = (message) => {
                if (message.header.msg_type === "stream") out += message.content.text;
                if (message.header.msg_type === "error") out += message.content.traceback.join("\\n");
              };
              await future.done;
              return out;
            }""",
            script,
        )
        assert "ANSWER" in text, text
        return json.loads(text.split("ANSWER", 1)[1])

    def theme(self, name: str) -> None:
        self.page.evaluate(
            "(theme) => window.jupyterapp.commands.execute('apputils:change-theme', {theme})", f"JupyterLab {name}"
        )
        self.page.wait_for_function(
            "(light) => document.body.dataset.jpThemeLight === light", arg=str(name == "Light").lower()
        )

    def width(self, pixels: int) -> None:
        self.page.set_viewport_size({"width": pixels, "height": 1400})


def open_and_run(page: Any, lab: Lab, name: str, desks: int = 1) -> Notebook:
    """Open a notebook of the lab in a page, run all its cells, and wait for its Desks."""
    notebook = Notebook(page)
    page.on("pageerror", lambda error: notebook.errors.append(str(error)))
    page.goto(f"{lab.url}/lab/tree/{name}?token={TOKEN}&reset")
    page.wait_for_function(IDLE, timeout=60_000)
    page.evaluate("() => window.jupyterapp.shell.collapseLeft()")
    page.evaluate("() => window.jupyterapp.commands.execute('notebook:run-all-cells')")
    page.wait_for_function(IDLE, timeout=120_000)
    for index in range(desks):
        # the notebook renders cells as they come into view
        page.evaluate(
            """(index) => {
              const cells = [...document.querySelectorAll(".jp-CodeCell")];
              cells.filter((cell) => /Desk\\(/.test(cell.textContent))[index]?.scrollIntoView();
            }""",
            index,
        )
        notebook.desk(index).wait_for(state="attached", timeout=60_000)
    notebook.desk(0).scroll_into_view_if_needed()
    return notebook
