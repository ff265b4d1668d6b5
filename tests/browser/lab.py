"""A small driver: one private JupyterLab server and one headless Chromium, for tests and measurements.

Server, settings and browser live in a temporary directory; nothing outside it is read or written, and every request
that leaves this machine is refused and written down.
"""

from __future__ import annotations

import json
import os
import secrets
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time
import urllib.error
import urllib.request
from contextlib import suppress
from pathlib import Path
from typing import Any

from playwright.sync_api import Locator, Page, sync_playwright

PANEL = ".jp-NotebookPanel:not(.lm-mod-hidden)"

# What a page says that is not about the panels.
_NOT_OURS = ("favicon", "/lsp", "api/contents", "ResizeObserver loop")


def chromium() -> str | None:
    """Path of the browser: from SOFFIT_CHROMIUM, or where a distribution puts it."""
    for candidate in (os.environ.get("SOFFIT_CHROMIUM"), "/usr/bin/chromium", shutil.which("chromium")):
        if candidate and Path(candidate).exists():
            return candidate
    return None


def notebook(*sources: str) -> dict[str, Any]:
    """A notebook of code cells."""
    cells = [
        {
            "cell_type": "code",
            "id": f"cell-{number}",
            "metadata": {},
            "source": source,
            "outputs": [],
            "execution_count": None,
        }
        for number, source in enumerate(sources)
    ]
    kernel = {"name": "python3", "display_name": "Python 3", "language": "python"}
    return {"cells": cells, "metadata": {"kernelspec": kernel}, "nbformat": 4, "nbformat_minor": 5}


class Lab:
    """A server and a browser; a context manager."""

    def __init__(self, *, width: int = 1280, height: int = 960) -> None:
        self.size = {"width": width, "height": height}
        self.refused: list[str] = []

    def __enter__(self) -> Lab:
        self._folder = Path(tempfile.mkdtemp(prefix="soffit-lab-"))
        self.root = self._folder / "notebooks"
        try:
            self._serve()
            self._browse()
        except BaseException:
            self.__exit__()
            raise
        return self

    def _serve(self) -> None:
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            port = probe.getsockname()[1]
        self._token = secrets.token_hex(16)
        self.address = f"http://127.0.0.1:{port}/"
        self.root.mkdir()
        for plugin, value in {
            "apputils-extension/notification": {"fetchNews": "false", "checkForUpdates": False},
            "notebook-extension/tracker": {"windowingMode": "none"},
            "docmanager-extension/plugin": {"autosave": False},
        }.items():
            file = self._folder / "settings" / "@jupyterlab" / f"{plugin}.jupyterlab-settings"
            file.parent.mkdir(parents=True, exist_ok=True)
            file.write_text(json.dumps(value))
        homes = {
            "JUPYTER_CONFIG_DIR": "config",
            "JUPYTER_DATA_DIR": "data",
            "JUPYTER_RUNTIME_DIR": "runtime",
            "IPYTHONDIR": "ipython",
            "JUPYTERLAB_SETTINGS_DIR": "settings",
            "JUPYTERLAB_WORKSPACES_DIR": "workspaces",
        }
        env = {**os.environ, **{name: str(self._folder / folder) for name, folder in homes.items()}}
        env |= {"JUPYTER_PREFER_ENV_PATH": "1", "OMP_NUM_THREADS": "1"}
        env["PATH"] = f"{Path(sys.executable).parent}{os.pathsep}{env.get('PATH', '')}"
        command = [sys.executable, "-m", "jupyterlab", "--no-browser", "--allow-root"]
        command += ["--expose-app-in-browser", "--ServerApp.ip=127.0.0.1", f"--ServerApp.port={port}"]
        command += [f"--IdentityProvider.token={self._token}", f"--ServerApp.root_dir={self.root}"]
        self._log = (self._folder / "server.log").open("wb")
        self._server = subprocess.Popen(
            command, cwd=self.root, env=env, stdout=self._log, stderr=self._log, start_new_session=True
        )
        deadline = time.monotonic() + 90
        while True:
            with suppress(urllib.error.URLError, ConnectionError):
                self._ask("api/status")
                return
            if self._server.poll() is not None or time.monotonic() > deadline:
                raise RuntimeError((self._folder / "server.log").read_text(errors="replace")[-3000:])
            time.sleep(0.1)

    def _ask(self, path: str, method: str = "GET") -> None:
        request = urllib.request.Request(
            self.address + path, method=method, headers={"Authorization": f"token {self._token}"}
        )
        urllib.request.urlopen(request, timeout=10).close()

    def _browse(self) -> None:
        self._playwright = sync_playwright().start()
        flags = ["--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        self._browser = self._playwright.chromium.launch(executable_path=chromium(), args=flags)
        self._context = self._browser.new_context(viewport=self.size)
        self._context.set_default_timeout(30_000)
        self._context.grant_permissions(["clipboard-read", "clipboard-write"])

        def pass_on(route: Any) -> None:
            if route.request.url.startswith((self.address, "data:", "blob:")):
                route.continue_()
            else:
                self.refused.append(route.request.url)
                route.abort()

        self._context.route("**/*", pass_on)

    def __exit__(self, *_: object) -> None:
        for name in ("_context", "_browser"):
            if hasattr(self, name):
                getattr(self, name).close()
        if hasattr(self, "_playwright"):
            self._playwright.stop()
        if hasattr(self, "_server"):
            with suppress(OSError):
                self._ask("api/shutdown", "POST")
            try:
                self._server.wait(15)
            except subprocess.TimeoutExpired:
                os.killpg(self._server.pid, signal.SIGKILL)
                self._server.wait(5)
            self._log.close()
        shutil.rmtree(self._folder, ignore_errors=True)

    def open(self, content: dict[str, Any] | str, *, name: str = "") -> Sheet:
        """Open a notebook, given as such or by the name of a file that is there, in a page of its own."""
        if isinstance(content, dict):
            name = name or f"n{secrets.token_hex(3)}.ipynb"
            (self.root / name).write_text(json.dumps(content))
        else:
            name = content
        page = self._context.new_page()
        sheet = Sheet(self, page, name)
        workspace = secrets.token_hex(3)
        page.goto(f"{self.address}lab/workspaces/{workspace}/tree/{name}?token={self._token}")
        page.wait_for_selector(f"{PANEL} .jp-Cell", timeout=90_000)
        page.wait_for_function("async () => { await window.jupyterapp?.restored; return true; }")
        return sheet


class Sheet:
    """One notebook in one page."""

    def __init__(self, lab: Lab, page: Page, name: str) -> None:
        self.lab, self.page, self.name = lab, page, name
        self._complaints: list[str] = []
        page.on("console", lambda line: self._complain(line.text) if line.type == "error" else None)
        page.on("pageerror", lambda error: self._complain(str(error)))

    def _complain(self, text: str) -> None:
        if not any(known in text for known in _NOT_OURS):
            self._complaints.append(text)

    @property
    def complaints(self) -> list[str]:
        """Errors in the console and uncaught exceptions, so far."""
        return list(self._complaints)

    def command(self, name: str, **arguments: Any) -> None:
        """Run a command of JupyterLab."""
        self.page.evaluate(
            "([name, args]) => window.jupyterapp.commands.execute(name, args).then(() => null)",
            [name, arguments],
        )

    def run(self, *, timeout: float = 120) -> None:
        """Run every cell and wait until the kernel rests."""
        self.page.wait_for_function(
            "() => window.jupyterapp.shell.currentWidget?.sessionContext?.session?.kernel?.status === 'idle'",
            timeout=timeout * 1000,
        )
        # The widget manager restores what the kernel has when it connects; a view made before that is made twice.
        self.rest(quiet=1.0)
        self.command("notebook:run-all-cells")
        self.rest(timeout=timeout)

    def rest(self, *, timeout: float = 60, quiet: float = 0.25) -> None:
        """Wait until the kernel has been idle, and no cell busy, for a while."""
        calm = """() => window.jupyterapp.shell.currentWidget.sessionContext.session?.kernel?.status === 'idle'
            && ![...document.querySelectorAll('.jp-InputPrompt')].some((p) => p.textContent.includes('*'))"""
        since, deadline = time.monotonic(), time.monotonic() + timeout
        while time.monotonic() - since < quiet:
            if not self.page.evaluate(calm):
                since = time.monotonic()
            if time.monotonic() > deadline:
                raise TimeoutError("the kernel did not come to rest")
            time.sleep(0.03)

    def python(self, code: str) -> str:
        """Run code in the kernel, outside the cells, and return what it printed."""
        return str(
            self.page.evaluate(
                """async (code) => {
                    const kernel = window.jupyterapp.shell.currentWidget.sessionContext.session.kernel;
                    const future = kernel.requestExecute({ code, store_history: false });
                    let said = '';
                    future.onIOPub = ({ header, content }) => {
                        if (header.msg_type === 'stream') said += content.text;
                        if (header.msg_type === 'error') said += content.traceback.join('\\n');
                    };
                    await future.done;
                    return said;
                }""",
                code,
            )
        )

    def find(self, selector: str) -> Locator:
        """Elements of the notebook."""
        return self.page.locator(f"{PANEL} {selector}")

    def theme(self, name: str) -> None:
        """Change to the ``"Light"`` or the ``"Dark"`` theme."""
        self.command("apputils:change-theme", theme=f"JupyterLab {name}")
        self.page.wait_for_selector(f'body[data-jp-theme-name="JupyterLab {name}"]', state="attached")
        time.sleep(0.5)

    def save(self) -> Path:
        """Save the notebook; its path."""
        self.command("docmanager:save")
        return self.lab.root / self.name

    def drag(self, handle: Locator, start: float, end: float, *, steps: int = 25, hold: bool = False) -> None:
        """Drag along a range input with the mouse, from one share of its track to another."""
        handle.scroll_into_view_if_needed()
        box = handle.bounding_box()
        assert box is not None
        # A range's thumb, 16 px wide, does not leave the track.
        across = [box["x"] + 8 + share * (box["width"] - 16) for share in (start, end)]
        middle = box["y"] + box["height"] / 2
        self.page.mouse.move(across[0], middle)
        self.page.mouse.down()
        self.page.mouse.move(across[1], middle, steps=steps)
        if not hold:
            self.page.mouse.up()
