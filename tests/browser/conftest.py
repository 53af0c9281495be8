"""JupyterLab and Chromium for this folder's tests; where they are missing, a reason to skip."""

from __future__ import annotations

import contextlib
import functools
import http.server
import importlib.util
import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
FLAGS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
]  # fmt: skip


def _missing(reason):
    """Skip on a machine that lacks something; in CI, which installs it, that is a failure."""
    if os.environ.get("VOXELMAT_CI") == "1":
        pytest.fail(f"VOXELMAT_CI is set, so this may not be skipped: {reason}")
    pytest.skip(reason)


@pytest.fixture(scope="session")
def chromium():
    """A headless browser."""
    if importlib.util.find_spec("playwright") is None:
        _missing("playwright is not installed: pip install playwright")
    path = os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("chrome")
    if path is None:
        _missing("no Chromium found: apt-get install chromium, or name it in CHROMIUM")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as play:
        browser = play.chromium.launch(executable_path=path, args=FLAGS)
        yield browser
        browser.close()


@pytest.fixture(scope="session")
def gl():
    """A machine that can draw with OpenGL."""
    from voxelmat.workbench.glprobe import probe_gl

    if not probe_gl().works:
        _missing(probe_gl().reason)


@pytest.fixture(scope="session")
def made_up():
    """The module `tests/fabricated.py`."""
    spec = importlib.util.spec_from_file_location("fabricated", ROOT / "tests" / "fabricated.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def _free_port():
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


def _settings(folder):
    """No news, no look for updates: the tests need no network."""
    place = folder / "settings" / "@jupyterlab" / "apputils-extension"
    place.mkdir(parents=True)
    quiet = {"fetchNews": "false", "checkForUpdates": False}
    (place / "notification.jupyterlab-settings").write_text(json.dumps(quiet))


def _own_home(folder):
    """An environment in which Jupyter finds nothing of the user's."""
    return {
        **os.environ,
        "HOME": str(folder),
        "JUPYTER_CONFIG_DIR": str(folder / "config"),
        "JUPYTER_DATA_DIR": str(folder / "data"),
        "JUPYTER_RUNTIME_DIR": str(folder / "runtime"),
        "IPYTHONDIR": str(folder / "ipython"),
        "JUPYTERLAB_SETTINGS_DIR": str(folder / "settings"),
        "JUPYTERLAB_WORKSPACES_DIR": str(folder / "workspaces"),
        "PYTHONPATH": f"{ROOT}{os.pathsep}{ROOT / 'tests'}",
    }


@contextlib.contextmanager
def _serving(command, env, log_file, address):
    """A server in its own process group, with its kernels, until the block ends."""
    with log_file.open("w") as log:
        server = subprocess.Popen(command, env=env, stdout=log, stderr=log, start_new_session=True)
    try:
        _wait_for(address, server, log_file)
        yield
    finally:
        os.killpg(server.pid, signal.SIGTERM)
        try:
            server.wait(20)
        except subprocess.TimeoutExpired:
            os.killpg(server.pid, signal.SIGKILL)
            server.wait(20)


@pytest.fixture(scope="session")
def lab(tmp_path_factory):
    """A JupyterLab of our own: its address and the folder of its notebooks."""
    if importlib.util.find_spec("jupyterlab") is None:
        _missing("jupyterlab is not installed")
    folder = tmp_path_factory.mktemp("lab")
    notebooks = folder / "notebooks"
    notebooks.mkdir()
    _settings(folder)
    port = _free_port()
    env = _own_home(folder)
    command = [
        sys.executable, "-m", "jupyterlab", "--no-browser", "--allow-root", "--ip=127.0.0.1",
        f"--port={port}", "--ServerApp.port_retries=0", "--IdentityProvider.token=t",
        "--LabApp.expose_app_in_browser=True", "--LabApp.extension_manager=readonly",
        f"--ServerApp.root_dir={notebooks}",
    ]  # fmt: skip
    base = f"http://127.0.0.1:{port}"
    with _serving(command, env, folder / "lab.log", f"{base}/api/status?token=t"):
        yield base, notebooks


@pytest.fixture
def voila(tmp_path):
    """Serves a notebook as `voxelmat lab --app` does; gives the address with its token."""
    if importlib.util.find_spec("voila") is None:
        _missing("voila is not installed")
    from voxelmat.workflow.lab import app_command, app_environment

    with contextlib.ExitStack() as stack:

        def serve(notebook):
            port = _free_port()
            command = [*app_command(notebook, port=port, browser=False), "--Voila.token=t"]
            base = f"http://127.0.0.1:{port}"
            log = tmp_path / "voila.log"
            stack.enter_context(
                _serving(
                    command,
                    {**_own_home(tmp_path), **app_environment()},
                    log,
                    f"{base}/voila/static/main.js?token=t",
                )
            )
            return base, f"{base}/?token=t"

        yield serve


def _wait_for(address, server, log_file):
    for _ in range(400):
        if server.poll() is not None:
            pytest.fail(log_file.read_text()[-3000:])
        try:
            with urllib.request.urlopen(address, timeout=1):
                return
        except urllib.error.HTTPError:
            return  # it answers
        except OSError:
            time.sleep(0.25)
    pytest.fail("The server did not answer within 100 s.\n" + log_file.read_text()[-3000:])


class Notebook:
    """One notebook in one browser page."""

    def __init__(self, page, base, folder):
        self.page, self._base, self._folder = page, base, folder

    def open(self, name, cells):
        """Write a notebook of code cells and open it with an idle kernel."""
        import nbformat

        book = nbformat.v4.new_notebook()
        book.cells = [nbformat.v4.new_code_cell(c) for c in cells]
        book.metadata["kernelspec"] = {"name": "python3", "display_name": "Python 3"}
        nbformat.write(book, self._folder / name)
        self.page.goto(f"{self._base}/lab/tree/{name}?token=t&reset")
        self.page.wait_for_function(
            "window.jupyterapp?.shell.currentWidget?.sessionContext?.session?.kernel?.status"
            " === 'idle'",
            timeout=90_000,
        )

    def run_all(self):
        """Run every cell; an error in one of them fails the test."""
        self.page.evaluate("window.jupyterapp.commands.execute('notebook:run-all-cells')")
        bad = self.page.evaluate(
            "window.jupyterapp.shell.currentWidget.content.model.sharedModel.cells.flatMap("
            "c => (c.outputs || []).filter(o => o.output_type === 'error')"
            ".map(o => o.ename + ': ' + o.evalue))"
        )
        assert not bad, bad

    def ask(self, code):
        """What a line of code prints in the kernel."""
        return self.page.evaluate(
            """async code => {
                const kernel = window.jupyterapp.shell.currentWidget.sessionContext.session.kernel;
                let text = '';
                const future = kernel.requestExecute({code, store_history: false});
                future.onIOPub = m => { if (m.content.text) text += m.content.text;
                                        if (m.content.evalue) text += m.content.evalue; };
                await future.done;
                return text;
            }""",
            code,
        ).strip()

    def change_theme(self, name):
        """JupyterLab's "Light" or "Dark"."""
        self.page.evaluate(
            "name => window.jupyterapp.commands.execute('apputils:change-theme', {theme: name})",
            f"JupyterLab {name}",
        )
        light = "true" if name == "Light" else "false"
        self.page.wait_for_function(
            "wanted => document.body.dataset.jpThemeLight === wanted", arg=light
        )

    def shut_down(self):
        """End the kernel."""
        self.page.evaluate("window.jupyterapp.shell.currentWidget.sessionContext.shutdown()")


@pytest.fixture
def notebook(lab, chromium, request):
    """A notebook page; nothing may be fetched from elsewhere, no script may fail."""
    base, folder = lab
    context = chromium.new_context(viewport={"width": 1280, "height": 720}, reduced_motion="reduce")
    page = context.new_page()
    page.set_default_timeout(60_000)
    broken, outside = [], []
    page.on("pageerror", lambda e: broken.append(str(e)))
    page.on(
        "request",
        lambda r: None if r.url.startswith((base, "data:", "blob:")) else outside.append(r.url),
    )
    book = Notebook(page, base, folder)
    yield book
    if os.environ.get("VOXELMAT_SHOTS"):
        page.screenshot(path=Path(os.environ["VOXELMAT_SHOTS"]) / f"{request.node.name}.png")
    if page.evaluate("document.body.dataset.jpThemeLight === 'false'"):
        book.change_theme("Light")  # the server keeps it for the next test
    failed = page.get_by_text("javascript error").count()
    book.shut_down()
    context.close()
    assert not failed, "a widget could not be drawn"
    assert not broken, broken
    assert not outside, outside


_AXE = """async place => {
    const found = await axe.run(place, {resultTypes: ['violations']});
    if (found.passes.length < 10) throw new Error(`axe looked at nothing in ${place}`);
    return found.violations.filter(v => ['serious', 'critical'].includes(v.impact))
        .flatMap(v => v.nodes.map(n => `${v.id} (${v.impact}): ${n.html.slice(0, 160)} ` +
            n.any.concat(n.all).map(m => m.message).join('; ').slice(0, 200)));
}"""


@pytest.fixture(scope="session")
def axe_findings():
    """Calls axe-core, as its PyPI package ships it, on a page: serious and critical findings."""
    spec = importlib.util.find_spec("axe_playwright_python")
    if spec is None:
        _missing("axe-core is not installed: pip install axe-playwright-python")
    source = Path(spec.submodule_search_locations[0], "axe.min.js").read_text(encoding="utf-8")

    def found(page, place=".vm-bench"):
        if page.evaluate("typeof window.axe") == "undefined":
            page.evaluate(source)
        return page.evaluate(_AXE, place)

    return found


@pytest.fixture
def web_folder(tmp_path):
    """A folder that is served, and its address."""
    handler = functools.partial(_Quiet, directory=str(tmp_path))
    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), handler) as server:
        thread = threading.Thread(target=server.serve_forever, daemon=True)
        thread.start()
        yield tmp_path, f"http://127.0.0.1:{server.server_address[1]}"
        server.shutdown()
        thread.join()


class _Quiet(http.server.SimpleHTTPRequestHandler):
    def log_message(self, *args):
        """Say nothing."""


_BENCH = """
import pathlib, voxelmat, small_design
folder = pathlib.Path("{folder}")
folder.mkdir(exist_ok=True)
path = folder / "design.toml"
if not path.exists():
    small_design.write_small_design(folder)
bench = voxelmat.open_workbench(path)
bench
"""


@pytest.fixture
def open_bench(notebook):
    """Opens a workbench on the small design, `bench` in the kernel; gives its desk."""

    def opened(name):
        notebook.open(f"{name}.ipynb", [_BENCH.format(folder=name)])
        notebook.run_all()
        desk = notebook.page.locator(".vm-desk")
        desk.wait_for()
        notebook.page.locator(".vm img[data-seq]").first.wait_for()
        return desk

    return opened
