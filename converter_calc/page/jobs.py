"""Long jobs of a session: started, watched, cancelled; each in a process of its own.

A job belongs to the session that started it. It ends when it is cancelled, when the session has
gone, and when the server stops; its files go with it.
"""

from __future__ import annotations

import contextlib
import json
import logging
import os
import pickle
import shutil
import subprocess
import sys
import tempfile
import threading
import time
import weakref
from collections.abc import Callable
from pathlib import Path
from threading import Lock
from typing import Any

import converter_calc
from converter_calc.basis.errors import ConverterError, Fault, InputError
from converter_calc.page.learning_job import PROGRESS, RESULT, TASK

LOG = logging.getLogger(__name__)
#: Jobs that run at once on a server, of all sessions.
MOST_JOBS = 2
#: Time between two looks at whether the session is still there, and how long it may be away [s].
LOOK_EVERY_S, AWAY_S = 5.0, 60.0
_RUNNING: weakref.WeakSet[Job] = weakref.WeakSet()
_STARTING = Lock()


class Job:
    """One job.

    kind : of learning_job.KINDS. frame : heat log. shop : content of the shop file. alive :
    whether the session is still there; None: as long as the server.

    Raises InputError where too many jobs are running already.
    """

    def __init__(
        self,
        kind: str,
        frame: Any,
        shop: dict[str, Any],
        alive: Callable[[], bool] | None = None,
    ) -> None:
        self.kind = kind
        self.started = time.monotonic()
        with _STARTING:
            if sum(job.running for job in list(_RUNNING)) >= MOST_JOBS:
                message = f"{MOST_JOBS} long jobs run on this machine already; try again later"
                raise InputError([Fault("learning", message)])
            self.folder = Path(tempfile.mkdtemp(prefix="converter_calc_job_"))
            self.process = _start(self.folder, pickle.dumps((kind, frame, shop)))
            _RUNNING.add(self)
        self._end = weakref.finalize(self, _end, self.process, self.folder)
        if alive is not None:
            watch = (self.process, self.folder, alive)
            threading.Thread(target=_watch, args=watch, daemon=True).start()

    @property
    def running(self) -> bool:
        """Whether it is still at work."""
        return self.process.poll() is None

    @property
    def seconds(self) -> float:
        """Time since it was started."""
        return time.monotonic() - self.started

    def progress(self) -> tuple[float, str]:
        """Share done, 0..1, and what is done now."""
        try:
            share, text = json.loads((self.folder / PROGRESS).read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return 0.0, "it is started"
        return min(max(float(share), 0.0), 1.0), str(text)

    def cancel(self) -> None:
        """End it now; its files are gone afterwards."""
        self._end()

    def result(self) -> dict[str, Any]:
        """What it found; the job is over then. Raises what it raised, ours; else InputError."""
        try:
            # written by our own process into a folder that nobody else can read
            kind, found = pickle.loads((self.folder / RESULT).read_bytes())  # noqa: S301
        except (OSError, EOFError, pickle.UnpicklingError) as error:
            LOG.error("a job failed: %s", _errors_of(self.folder))  # noqa: TRY400
            message = "the job ended without a result; the server's log says why"
            raise InputError([Fault("learning", message)]) from error
        finally:
            self._end()
        if kind == "refused":
            assert isinstance(found, ConverterError)  # noqa: S101
            raise found
        return dict(found)


def _start(folder: Path, task: bytes) -> subprocess.Popen[bytes]:
    (folder / TASK).write_bytes(task)
    own = str(Path(converter_calc.__file__).resolve().parents[1])
    paths = [own, *filter(None, [os.environ.get("PYTHONPATH")])]
    one_thread = dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "1")
    with (folder / "errors.txt").open("wb") as errors:
        return subprocess.Popen(  # noqa: S603 - nothing of the visitor is in the command
            [sys.executable, "-m", "converter_calc.page.learning_job", str(folder)],
            stdin=subprocess.PIPE, stdout=subprocess.DEVNULL, stderr=errors,
            env={**os.environ, **one_thread, "PYTHONPATH": os.pathsep.join(paths)},
        )  # fmt: skip


def _errors_of(folder: Path) -> str:
    try:
        return (folder / "errors.txt").read_text("utf-8", "replace")[-4000:]
    except OSError:
        return "ended from outside"


def _end(process: subprocess.Popen[bytes], folder: Path) -> None:
    """Kill the process if it is at work, and remove its files."""
    if process.poll() is None:
        process.kill()
    with contextlib.suppress(subprocess.TimeoutExpired):
        process.wait(5)
    if process.stdin is not None:
        with contextlib.suppress(OSError):
            process.stdin.close()
    shutil.rmtree(folder, ignore_errors=True)


def _watch(process: subprocess.Popen[bytes], folder: Path, alive: Callable[[], bool]) -> None:
    """End a job whose session has gone; a short break of the line does not count."""
    seen = time.monotonic()
    while process.poll() is None:
        time.sleep(LOOK_EVERY_S)
        if alive():
            seen = time.monotonic()
        elif time.monotonic() - seen > AWAY_S:
            _end(process, folder)
