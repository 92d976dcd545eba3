"""A review served from a thread, for tests that talk to it."""

from __future__ import annotations

import asyncio
import http.client
import threading
from urllib.parse import urlsplit

from xrfid.review.app import Room
from xrfid.review.server import Review
from xrfid.review.session import Desk

LIMIT = 3 * 2**20


class Running:
    """A review served from a thread of its own."""

    def __init__(self, folder, instrument=None, inputs=(), scan=None):
        self.desk = Desk(folder, instrument)
        for spectrum in inputs:
            self.desk.add(spectrum, scan.instrument if scan else None)
        self.told = []
        started = threading.Event()

        def serve():
            asyncio.set_event_loop(asyncio.new_event_loop())
            room = Room(self.desk, scan, "A. Reader")
            self.server = Review(room.page, room.accept, self._opened(room), limit=LIMIT)
            self.server.start()
            self.loop = self.server.io_loop
            self.loop.add_callback(started.set)
            self.loop.start()
            self.server.stop()
            self.server._http.stop()
            self.loop.close(all_fds=True)

        self.thread = threading.Thread(target=serve)
        self.thread.start()
        assert started.wait(60)
        parts = urlsplit(self.server.url)
        self.host, self.path = parts.netloc, parts.path

    def _opened(self, room):
        def opened():
            self.told.append(1)
            room.opened()

        return opened

    def close(self):
        self.loop.add_callback(self.loop.stop)
        self.thread.join(20)
        assert not self.thread.is_alive()

    def ask(self, method, path, body=None, **headers):
        """Status, headers and text of an answer."""
        connection = http.client.HTTPConnection(self.host, timeout=20)
        try:
            connection.request(method, path, body, headers={k.replace("_", "-"): v for k, v in headers.items()})
            answer = connection.getresponse()
            return answer.status, dict(answer.getheaders()), answer.read().decode("utf-8", "replace")
        finally:
            connection.close()

    def upload(self, name, body, **headers):
        own = {"Origin": f"http://{self.host}", "X-File-Name": name}
        return self.ask("POST", f"{self.path}upload", body, **own | headers)
