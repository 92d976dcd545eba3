"""The local server: this machine only, behind a secret in the address, for pages of its own origin only.

The token is the first part of every path. Whatever comes without it, under another host name (a
foreign page that resolves to this machine), or from another origin is refused before anything reads
it; that holds for pages, scripts, uploads and the web socket alike.
"""

from __future__ import annotations

import asyncio
import hmac
import json
import secrets
import socket
from collections.abc import Callable
from typing import Any
from urllib.parse import unquote

from bokeh.server.server import BaseServer
from bokeh.server.tornado import BokehTornado
from tornado.httpserver import HTTPServer
from tornado.httputil import HTTPHeaders, HTTPServerRequest
from tornado.ioloop import IOLoop
from tornado.web import OutputTransform, RequestHandler, stream_request_body

from xrfid.errors import OutputError, XrfidError
from xrfid.review.uploads import LARGEST_UPLOAD_BYTES

HOST = "127.0.0.1"
LARGEST_MESSAGE_BYTES = 2**20
"""Of anything but an upload that a browser sends."""
LONGEST_NAME = 200


class Review(BaseServer):
    """The server of one review.

    Parameters
    ----------
    page : callable
        Makes the page (a Panel template) of one visit.
    accept : callable
        Takes the name and the bytes of an upload; returns what was opened. Called in a worker thread.
    opened : callable
        Told on the server's own thread that `accept` has opened something.
    port : int
        0: any free one.
    limit : int
        Largest upload, bytes.

    Attributes
    ----------
    url : str
        With its token; whoever knows it may look and decide.

    Raises
    ------
    OutputError
        If the port is taken.
    """

    def __init__(self, page: Callable[[], Any], accept: Callable[[str, bytes], list[str]],
                 opened: Callable[[], None], port: int = 0, limit: int = LARGEST_UPLOAD_BYTES) -> None:  # fmt: skip
        from panel.io.application import build_applications

        listening = _listen(port)
        self.own_port: int = listening.getsockname()[1]
        self.token = secrets.token_urlsafe(32)
        self.url = f"http://{HOST}:{self.own_port}/{self.token}/"
        uploads = {"accept": accept, "opened": opened, "limit": limit}
        application = _Guarded(
            build_applications({"/": page}, title="xrfid review"),
            prefix=f"/{self.token}",
            use_index=False,
            redirect_root=False,
            extra_websocket_origins=[f"{HOST}:{self.own_port}"],
            extra_patterns=[("/upload", _Upload, uploads), ("/favicon.ico", _NoIcon)],
            websocket_max_message_size_bytes=LARGEST_MESSAGE_BYTES,
        )
        application.guard(self.token, self.own_port)
        http = HTTPServer(application, max_body_size=LARGEST_MESSAGE_BYTES)
        http.add_sockets([listening])
        super().__init__(IOLoop.current(), application, http)


def _listen(port: int) -> socket.socket:
    """Return a socket that listens on this machine only."""
    made = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
    try:
        made.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        made.setblocking(False)
        made.bind((HOST, port))
        made.listen(128)
    except (OSError, OverflowError) as error:
        made.close()
        remedy = "choose another, or leave it out"
        raise OutputError(f"--port {port}", f"cannot be used ({error})", remedy) from None
    return made


class _Guarded(BokehTornado):
    """Bokeh's application behind the token, the host and the origin."""

    def guard(self, token: str, port: int) -> None:
        """Set what is let through."""
        self._secret = token.encode()
        self._host = f"{HOST}:{port}"
        self.transforms.append(_SafeHeaders)

    def find_handler(self, request: HTTPServerRequest, **kwargs: Any) -> Any:
        """Choose who answers; strangers get a refusal."""
        if not self._lets_in(request):
            return self.get_handler_delegate(request, _Refused)
        return super().find_handler(request, **kwargs)

    def _lets_in(self, request: HTTPServerRequest) -> bool:
        first = request.path.removeprefix("/").partition("/")[0].encode("utf-8", "replace")
        origin = request.headers.get("Origin")
        # a browser always names the origin of a page that opens a web socket or sends a body
        must_name = request.method not in ("GET", "HEAD") or "upgrade" in request.headers.get("Connection", "").lower()
        return (
            hmac.compare_digest(first, self._secret)
            and request.headers.get("Host") == self._host
            and (origin == f"http://{self._host}" or (origin is None and not must_name))
        )


class _Refused(RequestHandler):
    """Says no, and nothing else."""

    def prepare(self) -> None:
        self.set_status(403)
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        self.set_header("Connection", "close")
        self.finish("refused: open the address that xrfid review printed\n")

    def log_exception(self, *args: Any) -> None:
        """Strangers do not fill the terminal."""


class _NoIcon(RequestHandler):
    """Browsers ask for an icon; there is none."""

    def get(self) -> None:
        self.set_status(204)


class _SafeHeaders(OutputTransform):
    """Headers of every answer: nothing from elsewhere, no framing, no trace of the token."""

    _POLICY = (
        "default-src 'none'; script-src 'self' blob: 'unsafe-inline' 'unsafe-eval'; style-src 'self' 'unsafe-inline'; "
        "img-src 'self' data: blob:; font-src 'self' data:; connect-src 'self' ws://{host}; "
        "form-action 'none'; base-uri 'none'; frame-ancestors 'none'"
    )

    def __init__(self, request: HTTPServerRequest) -> None:
        self._host = request.host if request.host.startswith(f"{HOST}:") else HOST

    def transform_first_chunk(
        self, status_code: int, headers: HTTPHeaders, chunk: bytes, finishing: bool
    ) -> tuple[int, HTTPHeaders, bytes]:
        headers["Content-Security-Policy"] = self._POLICY.format(host=self._host)
        headers["Referrer-Policy"] = "no-referrer"
        headers["X-Content-Type-Options"] = "nosniff"
        headers["Cross-Origin-Resource-Policy"] = "same-origin"
        return status_code, headers, chunk


@stream_request_body
class _Upload(RequestHandler):
    """Takes one file into memory, bounded in size."""

    def initialize(self, accept: Callable[[str, bytes], list[str]], opened: Callable[[], None], limit: int) -> None:
        self._accept, self._opened, self._limit = accept, opened, limit
        self._data = bytearray()

    def prepare(self) -> None:
        declared = self.request.headers.get("Content-Length")
        if self.request.method != "POST" or declared is None or not declared.isdigit():
            self._say(411, "send one file with its length")
        elif int(declared) > self._limit:
            self._say(413, f"the file is larger than {self._limit / 2**20:.0f} MB; give it on the command line")
        else:
            self.request.connection.set_max_body_size(self._limit)  # type: ignore[union-attr]

    def data_received(self, chunk: bytes) -> None:
        self._data += chunk

    async def post(self) -> None:
        name = unquote(self.request.headers.get("X-File-Name", "upload"))[:LONGEST_NAME]
        data = bytes(self._data)
        try:
            names = await asyncio.get_running_loop().run_in_executor(None, self._accept, name, data)
        except XrfidError as error:
            self._say(422, str(error))
            return
        self._opened()
        self.write(json.dumps({"opened": names}))

    def _say(self, status: int, text: str) -> None:
        self.set_status(status)
        if status in (411, 413):
            self.set_header("Connection", "close")
        self.finish(json.dumps({"error": text}))
