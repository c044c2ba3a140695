"""The local page of a watch: for this computer alone, and only to be looked at."""

from __future__ import annotations

import json
import logging
import os
import secrets
import socket
import threading
from collections.abc import Callable
from typing import TYPE_CHECKING, Any, Self

from artifactlens.errors import OutputError
from artifactlens.live.state import LiveState
from artifactlens.page.live import live_fragments, live_page, live_script, live_style

if TYPE_CHECKING:
    from flask import Flask
    from flask import Response as Reply

ADDRESS = "127.0.0.1"
THREADS = 2
SECONDS_TO_CLOSE = 5.0

HEADERS = {
    "Content-Security-Policy": (
        "default-src 'none'; script-src 'self'; style-src 'self'; connect-src 'self'; "
        "img-src data:; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
    ),
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-store",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
}

USED = (
    "This link was used before; it opens the page once. Use the browser that it was opened "
    "with, or start artifactlens watch again for a new one."
)
CLOSED = "Open the link that artifactlens watch shows: this page does not belong to it."


class Door:
    """Who may look: whoever brings the token, once, and from then on the cookie.

    Cookies of one address are shared by all its ports, hence the port in the name.
    """

    def __init__(self, port: int) -> None:
        self.token = secrets.token_urlsafe(24)
        self.cookie = f"artifactlens-{port}"
        self.secret = secrets.token_urlsafe(24)
        self.hosts = frozenset(f"{name}:{port}" for name in (ADDRESS, "localhost"))
        self.origins = frozenset(f"http://{host}" for host in self.hosts)
        self._lock = threading.Lock()
        self._spent = False

    def spend(self, token: str) -> bool:
        """Whether this is the token, brought for the first time."""
        with self._lock:
            right = _same(token, self.token) and not self._spent
            self._spent = self._spent or right
            return right

    def knows(self, cookie: str | None) -> bool:
        """Whether somebody was let in before."""
        return cookie is not None and _same(cookie, self.secret)


def _same(given: str, wanted: str) -> bool:
    return secrets.compare_digest(given.encode(), wanted.encode())


def live_app(get_state: Callable[[], LiveState], door: Door) -> Flask:
    """The pages, behind the door: ``/``, its style and script, and ``/now``.

    No path names a file: whatever the page consists of is held in memory.
    """
    from flask import Flask, Response, redirect, request
    from werkzeug.exceptions import HTTPException

    app = Flask("artifactlens.live", static_folder=None, template_folder=None)
    page, style, script = live_page(), live_style(), live_script()

    def plain(words: str, status: int) -> Reply:
        return Response(f"{words}\n", status, content_type="text/plain; charset=utf-8")

    @app.before_request
    def guard() -> Any:  # noqa: ANN401  (None, or an answer)
        if request.method != "GET":
            return plain("This page can only be looked at.", 405)
        if request.headers.get("Host") not in door.hosts:
            return plain("This page is for this computer only.", 403)
        if request.headers.get("Origin") not in (None, *door.origins):
            return plain("No other page may read this one.", 403)
        known = door.knows(request.cookies.get(door.cookie))
        token = request.args.get("token") if request.path == "/" else None
        if token is None:
            return None if known else plain(CLOSED, 403)
        first = door.spend(token)
        if not (first or known):
            return plain(USED, 403)
        answer = redirect(
            "/", 303
        )  # so that the token stays neither on screen nor in the history
        if first:
            answer.set_cookie(door.cookie, door.secret, httponly=True, samesite="Strict")
        return answer

    @app.after_request
    def seal(answer: Reply) -> Reply:
        answer.headers.update(HEADERS)
        return answer

    @app.get("/")
    def index() -> Reply:
        return Response(page, content_type="text/html; charset=utf-8")

    @app.get("/live.css")
    def css() -> Reply:
        return Response(style, content_type="text/css; charset=utf-8")

    @app.get("/live.js")
    def js() -> Reply:
        return Response(script, content_type="text/javascript; charset=utf-8")

    @app.get("/now")
    def now() -> Reply:
        state = live_fragments(get_state())
        return Response(json.dumps(state), content_type="application/json")

    @app.errorhandler(Exception)
    def fail(error: Exception) -> Reply:
        if isinstance(error, HTTPException):
            return plain("There is nothing here.", error.code or 404)
        # The terminal shows the list meanwhile: no trace may be printed across it.
        return plain(f"The page cannot be made ({type(error).__name__}).", 500)

    return app


class LiveServer:
    """Serves the page from a thread of its own until :meth:`close`; a context manager.

    Parameters
    ----------
    get_state : function without arguments
        Gives the state to show; called from other threads, at least twice a second.
    port : int
        Of this computer; 0 takes a free one.

    Attributes
    ----------
    url : str
        Opens the page once, in one browser, which is then known by a cookie.

    Raises
    ------
    OutputError
        If the port is taken, or the packages of the extra ``live`` are missing.
    """

    url: str

    def __init__(self, get_state: Callable[[], LiveState], port: int = 0) -> None:
        try:
            from waitress.server import create_server

            listening = _listening(port)
            number = listening.getsockname()[1]
            door = Door(number)
            app = live_app(get_state, door)
        except ModuleNotFoundError as error:
            raise OutputError(
                f"The local page needs {error.name}, which is not installed.",
                "Run: pip install 'artifactlens[live]', or watch without it: --no-page",
            ) from None
        # A warning of the server would be printed across the list in the terminal.
        logging.getLogger("waitress").addHandler(logging.NullHandler())
        self._sockets: dict[int, Any] = {}
        self._server = create_server(
            app, map=self._sockets, sockets=[listening], threads=THREADS, ident=None
        )
        self.url = f"http://{ADDRESS}:{number}/?token={door.token}"
        self._thread = threading.Thread(
            target=self._server.run, name="artifactlens page", daemon=True
        )
        self._thread.start()

    def close(self) -> None:
        """Stop serving; the port is free afterwards. Calling it again does nothing."""
        if self._thread.is_alive():
            # Sockets are closed by the thread that waits on them.
            self._server.trigger.pull_trigger(self._hang_up)
            self._thread.join(SECONDS_TO_CLOSE)
            self._server.task_dispatcher.shutdown(timeout=SECONDS_TO_CLOSE)

    def _hang_up(self) -> None:
        for one in list(self._sockets.values()):
            one.close()

    def __enter__(self) -> Self:
        """Serve already."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close."""
        self.close()


def _listening(port: int) -> socket.socket:
    """A bound socket, so that the port is known before there is an app."""
    listening = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
    if os.name == "posix":  # elsewhere this would let two programs share the port
        listening.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listening.bind((ADDRESS, port))
    except OSError:
        listening.close()
        raise OutputError(
            f"The port {port} of this computer cannot be had: another program may use it.",
            "Give another one with --port, or leave it out: then a free one is taken.",
        ) from None
    return listening
