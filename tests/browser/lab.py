"""One notebook open in JupyterLab in a headless Chromium: what a test does to it and asks of it."""

import json
import os
import pathlib
import secrets
import shutil
import signal
import socket
import subprocess
import sys
import time
import urllib.request

import nbformat

CHROMIUM_FLAGS = [
    "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--disable-background-networking", "--mute-audio",
    "--disable-background-timer-throttling", "--disable-renderer-backgrounding", "--disable-backgrounding-occluded-windows",
    "--force-color-profile=srgb", "--font-render-hinting=none",
]  # fmt: skip
NOT_OURS = (
    "favicon.ico",
    "terminals",
    "source map",
    "allowUnionTypes",
)  # console lines that JupyterLab writes by itself
SETTINGS = {
    "apputils-extension/notification": {"fetchNews": "false", "checkForUpdates": False, "doNotDisturbMode": True},
    "docmanager-extension/plugin": {"autosave": False},
    "notebook-extension/tracker": {"windowingMode": "none", "recordTiming": False},
}
READY = """() => {
    const widget = window.jupyterapp && window.jupyterapp.shell.currentWidget;
    const session = widget && widget.sessionContext && widget.sessionContext.session;
    const kernel = session && session.kernel;
    return !!(kernel && widget.content.widgets.length && kernel.connectionStatus === 'connected' && kernel.status === 'idle');
}"""
IDLE = """() => {
    const widget = window.jupyterapp.shell.currentWidget;
    const cells = widget.content.widgets.filter(c => c.model.type === 'code' && c.model.sharedModel.source.trim());
    const done = c => c.model.executionCount !== null && c.model.sharedModel.executionState !== 'running';
    return cells.every(done) && widget.sessionContext.session.kernel.status === 'idle';
}"""
PATIENCE = 240_000  # milliseconds: only a page that hangs waits that long
ERRORS = "application/vnd.jupyter.error", "application/vnd.jupyter.stderr"


class Server:
    """JupyterLab on a free port of this machine, with folders of its own for everything it reads and writes."""

    def __init__(self, base: pathlib.Path):
        self.base, self.root, self.token = base, base / "root", secrets.token_hex(16)
        self.root.mkdir()
        for name, values in SETTINGS.items():
            file = base / "settings" / "@jupyterlab" / f"{name}.jupyterlab-settings"
            file.parent.mkdir(parents=True, exist_ok=True)
            file.write_text(json.dumps(values), encoding="utf-8")

    def start(self) -> None:
        """Start, and wait until it answers."""
        for _ in range(3):  # another process may take the free port first
            with socket.socket() as probe:
                probe.bind(("127.0.0.1", 0))
                port = probe.getsockname()[1]
            self.url = f"http://127.0.0.1:{port}"
            with (self.base / "server.log").open("ab") as log:
                self.process = subprocess.Popen(
                    self._command(port), cwd=self.root, env=self._environment(), stdout=log, stderr=log,
                    start_new_session=True,
                )  # fmt: skip
            while self.process.poll() is None:
                try:
                    with urllib.request.urlopen(f"{self.url}/api/status?token={self.token}", timeout=5) as answer:
                        if answer.status == 200:
                            return
                except OSError:
                    time.sleep(0.1)
        raise RuntimeError(
            "JupyterLab did not start: " + (self.base / "server.log").read_text(errors="replace")[-2000:]
        )

    def _command(self, port: int) -> list[str]:
        root = ["--allow-root"] if os.geteuid() == 0 else []
        return [
            sys.executable, "-m", "jupyterlab", "--no-browser", "--ServerApp.ip=127.0.0.1", f"--ServerApp.port={port}",
            "--ServerApp.port_retries=0", f"--IdentityProvider.token={self.token}", f"--ServerApp.root_dir={self.root}",
            "--LabApp.expose_app_in_browser=True", "--LabApp.news_url=None", "--LabApp.extension_manager=readonly",
            "--LabApp.check_for_updates_class=jupyterlab.NeverCheckForUpdate", "--ServerApp.terminals_enabled=False",
            f"--FileCheckpoints.checkpoint_dir={self.base / 'checkpoints'}", *root,
        ]  # fmt: skip

    def _environment(self) -> dict:
        own = {name: value for name, value in os.environ.items() if not name.startswith(("JUPYTER", "IPYTHON"))}
        folders = {
            "JUPYTER_CONFIG_DIR": "config", "JUPYTER_DATA_DIR": "data", "JUPYTER_RUNTIME_DIR": "run", "HOME": ".",
            "JUPYTERLAB_SETTINGS_DIR": "settings", "JUPYTERLAB_WORKSPACES_DIR": "workspaces", "IPYTHONDIR": "ipython",
        }  # fmt: skip
        own |= {name: str(self.base / folder) for name, folder in folders.items()}
        path = os.pathsep.join([str(pathlib.Path(sys.executable).parent), os.environ["PATH"]])
        return own | {"JUPYTER_PLATFORM_DIRS": "1", "PATH": path, "PYDEVD_DISABLE_FILE_VALIDATION": "1"}

    def stop(self) -> None:
        """Stop the server and its kernels: the process group that it leads."""
        os.killpg(self.process.pid, signal.SIGTERM)
        try:
            self.process.wait(10)
        except subprocess.TimeoutExpired:
            os.killpg(self.process.pid, signal.SIGKILL)
            self.process.wait()


class Lab:
    """A page with one notebook.

    Attributes
    ----------
    problems : list of str
        What the console, the page and the network complained about.
    """

    def __init__(self, server: Server, browser, size=(1280, 900)):
        self.server, self.problems = server, []
        self.context = browser.new_context(
            viewport={"width": size[0], "height": size[1]}, reduced_motion="reduce", device_scale_factor=1
        )
        self.page = self.context.new_page()
        self.page.set_default_timeout(PATIENCE)
        self.page.on("console", lambda m: self._note(m.text) if m.type == "error" else None)
        self.page.on("pageerror", lambda error: self._note(str(error)))
        self.page.on("requestfailed", lambda request: self._note(f"request failed: {request.url}"))

    def _note(self, text: str) -> None:
        if not any(word in text for word in NOT_OURS):
            self.problems.append(text)

    def open(self, notebook, name: str) -> None:
        """Open a notebook (an `nbformat` node), its kernel running."""
        notebook.metadata.setdefault(
            "kernelspec", {"name": "python3", "display_name": "Python 3", "language": "python"}
        )
        nbformat.write(notebook, self.server.root / name)
        address = f"{self.server.url}/lab/workspaces/{secrets.token_hex(4)}/tree/{name}?token={self.server.token}&reset"
        self.page.goto(address, wait_until="domcontentloaded")
        self.page.wait_for_function(READY, timeout=PATIENCE)

    def theme(self, name: str) -> None:
        """Change the colour theme: "JupyterLab Light" or "JupyterLab Dark"."""
        change = "name => window.jupyterapp.commands.execute('apputils:change-theme', {theme: name}).then(() => null)"
        self.page.evaluate(change, name)
        self.page.wait_for_function("name => document.body.dataset.jpThemeName === name", arg=name, timeout=PATIENCE)

    def run_all(self) -> None:
        """Run every cell and wait for the last."""
        self.page.evaluate("() => window.jupyterapp.commands.execute('notebook:run-all-cells').then(() => null)")
        self.page.wait_for_function(IDLE, timeout=PATIENCE)

    def complaints(self) -> list[str]:
        """Return what the cells wrote as errors or to stderr."""
        selector = ", ".join(f".jp-OutputArea-output[data-mime-type='{kind}']" for kind in ERRORS)
        return self.page.locator(selector).all_inner_texts()

    def close(self) -> None:
        """Stop the kernel and close the page."""
        self.page.evaluate("() => window.jupyterapp && window.jupyterapp.serviceManager.sessions.shutdownAll()")
        self.context.close()


def chromium() -> str | None:
    """Return the browser of this machine."""
    return os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("chromium-browser")
