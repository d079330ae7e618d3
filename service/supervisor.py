"""`serve`: the HTTP server in this process, the workers as child processes that are started again when they die.

The server binds first, opens the data folder, then starts the workers; SIGTERM or SIGINT ends event streams, waits for
requests in hand, tells the workers to stop and gives them stop_s. A worker notices the end of this process by its
stdin and ends too, so that no two sets of workers are left after a crash.
"""

from __future__ import annotations

import dataclasses
import logging
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from pathlib import Path
from types import FrameType
from typing import Any

import uvicorn

from extractor.errors import InputError
from service.app import create_app
from service.connections import Connection
from service.settings import PREFIX, ServiceSettings

log = logging.getLogger("bellassay.supervisor")
SHORT_LIFE_S, LONGEST_PAUSE_S = 2.0, 10.0
KEEP_ALIVE_S = 15
BACKLOG = 1024
STORAGE_FAILED, STARTUP_FAILED = 1, 3          # exit codes


class Supervisor:
    """Keeps `settings.workers` worker processes running between `start` and `stop`."""

    def __init__(self, settings: ServiceSettings) -> None:
        self._settings, self._stopping = settings, threading.Event()
        self._lock = threading.Lock()
        self._children: dict[int, subprocess.Popen] = {}
        self._threads = [threading.Thread(target=self._keep, args=(number,), name=f"worker {number}", daemon=True)
                         for number in range(settings.workers)]

    def start(self) -> None:
        for thread in self._threads:
            thread.start()

    def pids(self) -> list[int]:
        """Process ids of the workers now running."""
        with self._lock:
            return [child.pid for child in self._children.values() if child.poll() is None]

    def stop(self) -> None:
        """SIGTERM to all, stop_s for them to give back what they hold, then the end of their stdin, which ends them."""
        with self._lock:
            self._stopping.set()
            children = list(self._children.values())
            for child in children:
                child.terminate()
        deadline = time.monotonic() + self._settings.stop_s
        for child in children:
            try:
                child.wait(max(0.0, deadline - time.monotonic()))
            except subprocess.TimeoutExpired:
                child.stdin.close()
                child.wait()
        for thread in self._threads:
            thread.join()

    def _keep(self, number: int) -> None:
        pause_s = 0.0
        while not self._stopping.wait(pause_s):
            began = time.monotonic()
            with self._lock:
                if self._stopping.is_set():
                    return
                child = self._children[number] = _start_worker(self._settings)
            code = child.wait()
            child.stdin.close()
            if self._stopping.is_set():
                return
            log.warning("worker process %d ended with %d; another one is started", child.pid, code)
            # The first restart is immediate; only a worker that keeps dying young is slowed down.
            pause_s = min(LONGEST_PAUSE_S, 2 * pause_s + 0.1) if time.monotonic() - began < SHORT_LIFE_S else 0.0


def _start_worker(settings: ServiceSettings) -> subprocess.Popen:
    return subprocess.Popen([sys.executable, "-P", "-m", "service.jobs.worker", "--supervised"], stdin=subprocess.PIPE,
                            stdout=sys.stderr,
                            env=worker_environment(settings))


def worker_environment(settings: ServiceSettings) -> dict[str, str]:
    """This process's environment with every setting as a variable, so that a worker has exactly the same ones."""
    environ = {name: value for name, value in os.environ.items() if not name.startswith(PREFIX)}
    for item in dataclasses.fields(settings):
        value = getattr(settings, item.name)
        if value is not None:
            environ[PREFIX + item.name.upper()] = repr(value) if isinstance(value, float) else str(value)
    environ[PREFIX + "DATA"] = str(settings.data.resolve())
    # The same program as this one: never a folder "service" that happens to lie where it is started (hence also -P).
    ours = str(Path(__file__).resolve().parents[1])
    environ["PYTHONPATH"] = os.pathsep.join([ours, *filter(None, [environ.get("PYTHONPATH")])])
    return environ


class _Server(uvicorn.Server):
    """Ends event streams as soon as it is told to stop; otherwise it would wait for their watchers."""

    def handle_exit(self, sig: int, frame: FrameType | None) -> None:
        self.config.loaded_app_state.stopping.set()     # type: ignore[attr-defined]
        super().handle_exit(sig, frame)


def serve(settings: ServiceSettings, *, on_listening: Callable[[str], None] | None = None) -> int:
    """Runs the service until SIGTERM or SIGINT; the exit code (1 if the disk failed).

    on_listening   called with the address once requests are answered
    Errors raised: InputError if the address cannot be bound or the data folder does not fit.
    """
    logging.basicConfig(level=settings.log_level.upper(), format="%(asctime)s %(levelname)s %(name)s %(message)s")
    sock = bind(settings.host, settings.port)
    app = create_app(settings)
    server = make_server(app, settings)
    code = 0

    def disk_failed() -> None:
        nonlocal code
        code = STORAGE_FAILED
        server.should_exit = True

    app.state.on_failure = disk_failed
    supervisor = Supervisor(settings)
    host, port = sock.getsockname()[:2]
    shown = f"[{host}]" if ":" in host else host
    supervisor.start()
    handlers = _own_signals()
    announcer = threading.Thread(target=_announce, args=(server, f"http://{shown}:{port}", on_listening), daemon=True)
    announcer.start()
    try:
        server.run(sockets=[sock])
    finally:
        supervisor.stop()
        sock.close()
        for number, handler in handlers.items():
            signal.signal(number, handler)
    return code if server.started else STARTUP_FAILED


def _own_signals() -> dict[int, Any]:
    """The server hands a signal on when it has ended; by default that would end this process before its workers."""
    if threading.current_thread() is not threading.main_thread():
        return {}
    return {number: signal.signal(number, lambda *_: None) for number in (signal.SIGTERM, signal.SIGINT)}


def make_server(app: object, settings: ServiceSettings) -> uvicorn.Server:
    """The HTTP server for the application, with its limits."""
    config = uvicorn.Config(
        app, http=Connection, ws="none", lifespan="on", log_config=None, access_log=False, server_header=False,
        proxy_headers=False,
        limit_concurrency=settings.connections, backlog=BACKLOG, timeout_keep_alive=KEEP_ALIVE_S,
        timeout_graceful_shutdown=max(1, int(settings.stop_s)))
    config.loaded_app_state = app.state         # type: ignore[attr-defined]
    return _Server(config)


def _announce(server: uvicorn.Server, url: str, on_listening: Callable[[str], None] | None) -> None:
    while not server.started and not server.should_exit:
        time.sleep(0.01)
    if server.started and on_listening is not None:
        on_listening(url)


def bind(host: str, port: int) -> socket.socket:
    """A listening socket. Errors raised: InputError with advice."""
    try:
        # With the protocol named, the event loop switches off Nagle's algorithm, which delays small answers by 40 ms.
        sock = socket.socket(socket.AF_INET6 if ":" in host else socket.AF_INET, socket.SOCK_STREAM, socket.IPPROTO_TCP)
        sock.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        sock.bind((host, port))
        sock.listen(BACKLOG)
        return sock
    except OSError as fault:
        raise InputError(f"cannot listen on {host} port {port}: {fault.strerror}; choose another --port, or stop what "
                         "listens there", code="cannot-listen") from None
