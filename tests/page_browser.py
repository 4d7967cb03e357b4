"""A server of the page and a browser for tests and for the latency bench."""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import pytest

ROOT = Path(__file__).resolve().parents[1]
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
READY = "[data-testid=stApp][data-test-script-state=notRunning]"


def required_or_skip() -> None:
    """Skip, with the reason, where there is no browser; in CI that is a failure."""
    missing = []
    try:
        import playwright.sync_api  # noqa: F401
    except ImportError:
        missing.append("playwright is not installed")
    if CHROMIUM is None:
        missing.append("no chromium on this machine")
    if missing and os.environ.get("CI", "").lower() == "true":
        pytest.fail("the browser tests must run in CI: " + ", ".join(missing))
    if missing:
        pytest.skip("page in a browser: " + ", ".join(missing))


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def served(log: Path) -> Iterator[tuple[str, int]]:
    """The page's own server by its own command: address and process id."""
    port = free_port()
    with log.open("wb") as out:
        server = subprocess.Popen(
            [sys.executable, "-m", "converter_calc", "page", "--port", str(port)],
            stdout=out, stderr=subprocess.STDOUT, cwd=log.parent,
            env={**os.environ, "PYTHONPATH": str(ROOT)},
        )  # fmt: skip
        try:
            address = f"http://127.0.0.1:{port}/"
            _wait_for(address + "_stcore/health", server)
            yield address, server.pid
        finally:
            server.terminate()
            server.wait(20)


def _wait_for(address: str, server: subprocess.Popen[bytes]) -> None:
    for _ in range(300):
        assert server.poll() is None, "the server stopped"
        try:
            with urllib.request.urlopen(address, timeout=2) as answer:  # noqa: S310 - own server
                if answer.status == 200:
                    return
        except OSError:
            time.sleep(0.1)
    raise TimeoutError(address)


@contextmanager
def browser() -> Iterator[Any]:
    from playwright.sync_api import sync_playwright

    with sync_playwright() as play:
        # without its sandbox the browser also runs as root, as in a container
        found = play.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
        yield found
        found.close()


def watched(found: Any, address: str, **options: Any) -> tuple[Any, list[str]]:
    """A page of a new browser session, and the addresses it asks outside its own server."""
    options = {"viewport": {"width": 1280, "height": 900}, **options}
    context = found.new_context(accept_downloads=True, **options)
    page = context.new_page()
    outside: list[str] = []
    own = urlsplit(address).netloc

    def note(url: str) -> None:
        parts = urlsplit(url)
        if parts.scheme not in ("data", "blob") and parts.netloc != own:
            outside.append(url)

    page.on("request", lambda request: note(request.url))
    page.on("websocket", lambda socket_: note(socket_.url))
    return page, outside


def go(page: Any, address: str) -> None:
    page.goto(address)
    page.get_by_role("tab", name="Plan a heat").wait_for(timeout=60000)
    settled(page)


def settled(page: Any) -> None:
    """Wait until the server has nothing more to send."""
    page.wait_for_timeout(150)
    page.wait_for_selector(READY, timeout=60000)
    page.wait_for_timeout(100)


def box(page: Any, label: str) -> Any:
    """A text field by its label."""
    return page.get_by_role("textbox", name=label, exact=True)


def value_in(page: Any, label: str) -> str:
    """What a field shows; the browser fills a field that was set for it in its own time."""
    from playwright.sync_api import expect

    expect(box(page, label)).not_to_have_value("", timeout=10000)
    return str(box(page, label).input_value())


def write(page: Any, label: str, text: str) -> None:
    """Type into a field as a person does, key by key, and press Enter."""
    target = box(page, label)
    target.click()
    target.press("Control+a")
    target.press("Delete")
    if text:
        target.press_sequentially(text, delay=5)
    target.press("Enter")
    settled(page)


def show(page: Any, view: str) -> None:
    page.get_by_role("tab", name=view).click()
    settled(page)


def figure_in(page: Any, name: str) -> str:
    """The large figure of a row of the recipe, as shown."""
    row = page.locator(
        "table.cc-large tr", has=page.get_by_role("rowheader", name=name, exact=True)
    )
    return str(row.locator("td").first.inner_text())


def height_of(page: Any) -> int:
    return int(page.evaluate("document.querySelector('.stMain').scrollHeight"))
