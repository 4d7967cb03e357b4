"""Start of the page's server: on this machine only, nothing sent anywhere."""

from __future__ import annotations

import sys
import threading
from pathlib import Path

#: Server settings; the same stand in .streamlit/config.toml for `streamlit run app.py`.
SETTINGS: dict[str, str | list[str]] = {
    "server.address": "127.0.0.1",
    "server.headless": "true",
    "server.fileWatcherType": "none",
    "server.maxUploadSize": "5",
    "server.allowedHosts": ["localhost", "127.0.0.1"],
    "browser.gatherUsageStats": "false",
    "client.toolbarMode": "minimal",
    "client.showErrorDetails": "type",
    "client.disableDataExport": "true",
    "theme.light.primaryColor": "#2960c9",
    "theme.dark.primaryColor": "#5b93f5",
}


def arguments(port: int) -> list[str]:
    """The command line of the server."""
    script = Path(__file__).with_name("script.py")
    flags = [
        f"--{name}={value}"
        for name, given in SETTINGS.items()
        for value in ([given] if isinstance(given, str) else given)
    ]
    return ["streamlit", "run", str(script), f"--server.port={port}", *flags]


def launch(port: int = 8501, register: Path | None = None) -> None:
    """Run the server until it is stopped.

    register : file of the register; others in its folder can be chosen on the page.
    Raises InputError where streamlit is not installed or the port is taken.
    """
    import os
    import socket

    from converter_calc.basis.errors import Fault, InputError

    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(("127.0.0.1", port))
        except OSError as error:
            message = f"{port} is taken or not allowed; give another port"
            raise InputError([Fault("--port", message)]) from error
    try:
        from streamlit.web import cli
    except ImportError as error:
        raise InputError([Fault("page", "streamlit is not installed")]) from error
    if register is not None:
        os.environ["CONVERTER_REGISTER"] = str(register.absolute())
    _warm_up()
    threading.Thread(target=_warm_up_spread, daemon=True).start()
    sys.argv = arguments(port)
    sys.exit(cli.main())


def _warm_up() -> None:
    """Load, solve and record, so that the first session does not wait for it."""
    from converter_calc.basis.tolerances import RECORDED_FROM_HEAT
    from converter_calc.page import session, shell  # noqa: F401
    from converter_calc.page.form import document_of

    for _ in range(RECORDED_FROM_HEAT):
        session.solve(document_of(session.start_form()), predict=False)


def _warm_up_spread() -> None:
    """Load what the spread needs, while the server is up already."""
    from converter_calc.learning.spread import spread
    from converter_calc.page import session, sureness
    from converter_calc.page.form import document_of

    outcome = session.solve(document_of(session.start_form()), predict=False).outcome
    if outcome is not None:
        spread(outcome, sureness.DRAWS, needs=False)
