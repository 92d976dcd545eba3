"""The server under attack: strangers, foreign pages, too much, and files that lead elsewhere."""

from __future__ import annotations

import http.client
import io
import socket
from pathlib import Path
from urllib.parse import urlsplit

import h5py
import numpy as np
import pytest

pytest.importorskip("panel")

from served import LIMIT, Running

from xrfid.errors import InputError, OutputError
from xrfid.review import uploads
from xrfid.review.server import LARGEST_MESSAGE_BYTES, Review
from xrfid.review.session import Desk

SAMPLES = Path(__file__).parents[2] / "sample_spectra"


@pytest.fixture(scope="module")
def running(tmp_path_factory):
    made = Running(tmp_path_factory.mktemp("review"))
    yield made
    made.close()


UPGRADE = {"Connection": "Upgrade", "Upgrade": "websocket", "Sec-WebSocket-Version": "13",
           "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==", "Sec-WebSocket-Protocol": "bokeh, x"}  # fmt: skip


def test_the_owner_sees_the_page(running):
    status, headers, text = running.ask("GET", running.path)
    assert status == 200
    assert "<title>xrfid review</title>" in text
    assert headers["Referrer-Policy"] == "no-referrer"
    assert "default-src 'none'" in headers["Content-Security-Policy"]
    assert "frame-ancestors 'none'" in headers["Content-Security-Policy"]
    assert "Access-Control-Allow-Origin" not in headers


def test_the_page_names_nothing_elsewhere(running):
    _, _, text = running.ask("GET", running.path)
    for word in ("https://", "cdn", "//fonts"):
        assert word not in text


@pytest.mark.parametrize(
    "path",
    [
        "/",
        "/wrong/",
        "/upload",
        "/ws",
        "/static/js/bokeh.min.js",
        "/favicon.ico",
        "/../",
        "/%00/",
        "/metadata",
        "/%C3%A9/",
    ],
)
def test_without_the_token_nothing_is_given(running, path):
    for method in ("GET", "POST", "HEAD", "PUT", "DELETE", "OPTIONS"):
        status, _, text = running.ask(method, path, Origin=f"http://{running.host}")
        assert status == 403
        assert running.server.token not in text


def test_half_a_token_is_no_token(running):
    for token in (running.server.token[:-1], running.server.token + "x", running.server.token.swapcase(), ""):
        assert running.ask("GET", f"/{token}/")[0] == 403
    assert running.ask("GET", f"/?token={running.server.token}")[0] == 403


def test_tokens_are_long_and_never_the_same(running, tmp_path):
    assert len(running.server.token) >= 43  # 256 bits in base 64
    other = Running(tmp_path)
    other.close()
    assert other.server.token != running.server.token


def test_another_host_name_is_refused(running):
    """A foreign name that resolves to this machine must not make the foreign page one of ours."""
    for host in ("evil.example", f"evil.example:{running.server.own_port}", "127.0.0.1", "localhost"):
        assert running.ask("GET", running.path, Host=host)[0] == 403


@pytest.mark.parametrize("origin", ["http://evil.example", "null", "", "http://127.0.0.1", "https://127.0.0.1:{port}",
                                    "http://localhost:{port}", "http://127.0.0.1:{port}.evil.example"])  # fmt: skip
def test_a_foreign_origin_is_refused(running, origin):
    origin = origin.format(port=running.server.own_port)
    assert running.ask("GET", running.path, Origin=origin)[0] == 403
    assert running.ask("GET", f"{running.path}ws", **UPGRADE, Origin=origin)[0] == 403
    assert running.upload("x.txt", b"1 2", Origin=origin)[0] == 403


def test_a_web_socket_must_name_its_origin(running):
    assert running.ask("GET", f"{running.path}ws", **UPGRADE)[0] == 403


def test_a_web_socket_of_our_own_page_still_needs_a_session(running):
    """The right origin is let through to the library, which wants its own signed session besides."""
    with socket.create_connection(urlsplit(running.server.url).netloc.split(":"), timeout=10) as link:
        lines = "".join(f"{k}: {v}\r\n" for k, v in {**UPGRADE, "Origin": f"http://{running.host}"}.items())
        link.sendall(f"GET {running.path}ws HTTP/1.1\r\nHost: {running.host}\r\n{lines}\r\n".encode())
        assert link.recv(12) != b"HTTP/1.1 403"


def test_it_listens_on_this_machine_only(running):
    listening = [s.getsockname()[0] for s in running.server._http._sockets.values()]
    assert listening == ["127.0.0.1"]


def test_a_taken_port_is_one_clear_line(running):
    with pytest.raises(OutputError, match=r"--port \d+: cannot be used"):
        Review(lambda: None, lambda *_: [], lambda: None, running.server.own_port)


# ---------------------------------------------------------------- uploads
def test_an_upload_is_opened_and_stays_in_memory(running):
    before = sorted(running.desk.folder.iterdir())
    status, _, text = running.upload("..%2F..%2Fetc%2Fcoupon.msa", (SAMPLES / "coupon.msa").read_bytes())
    assert (status, text) == (200, '{"opened": ["coupon.msa"]}')
    assert running.told
    assert running.desk.cases["coupon.msa"].spectrum.path == "coupon.msa"
    assert sorted(running.desk.folder.iterdir()) == before


def test_an_upload_that_makes_no_sense_is_one_clear_line(running):
    status, _, text = running.upload("x.txt", b"no counts in here")
    assert status == 422
    assert "x.txt" in text
    assert "Traceback" not in text


def test_an_upload_that_is_too_large_is_refused_before_it_is_read(running):
    link = socket.create_connection(urlsplit(running.server.url).netloc.split(":"), timeout=10)
    with link:
        head = (
            f"POST {running.path}upload HTTP/1.1\r\nHost: {running.host}\r\nOrigin: http://{running.host}\r\n"
            f"Content-Length: {LIMIT + 1}\r\n\r\n"
        )
        link.sendall(head.encode())  # and not one byte of the body
        assert b" 413 " in link.recv(64)


def test_an_upload_within_the_bound_but_larger_than_other_messages_is_read(running):
    text = b"0\n" * LARGEST_MESSAGE_BYTES
    status, _, said = running.upload("zeros.txt", text)
    assert len(text) < LIMIT
    assert status in (200, 422)
    assert "larger" not in said


@pytest.mark.parametrize("length", ["-1", "x", "1e3"])
def test_an_upload_must_state_its_length(running, length):
    with socket.create_connection(urlsplit(running.server.url).netloc.split(":"), timeout=10) as link:
        head = (
            f"POST {running.path}upload HTTP/1.1\r\nHost: {running.host}\r\nOrigin: http://{running.host}\r\n"
            f"Content-Length: {length}\r\n\r\n"
        )
        link.sendall(head.encode())
        assert link.recv(64)[9:12] in (b"400", b"411")


def test_an_upload_in_pieces_without_a_length_is_refused(running):
    with socket.create_connection(urlsplit(running.server.url).netloc.split(":"), timeout=10) as link:
        head = (
            f"POST {running.path}upload HTTP/1.1\r\nHost: {running.host}\r\nOrigin: http://{running.host}\r\n"
            "Transfer-Encoding: chunked\r\n\r\n"
        )
        link.sendall(head.encode())
        assert b" 411 " in link.recv(64)


def test_a_get_uploads_nothing(running):
    assert running.ask("GET", f"{running.path}upload")[0] in (405, 411)


def test_a_large_body_elsewhere_is_refused(running):
    try:
        status = running.ask("POST", running.path, b"x" * (LARGEST_MESSAGE_BYTES + 1), Origin=f"http://{running.host}")[
            0
        ]
    except (ConnectionError, http.client.HTTPException):
        return  # closed in our face: refused as well
    assert status >= 400


def _hdf5(write):
    held = io.BytesIO()
    with h5py.File(held, "w") as file:
        write(file)
    return held.getvalue()


def _secret(tmp_path):
    path = tmp_path / "secret.h5"
    with h5py.File(path, "w") as file:
        file["counts"] = np.arange(64.0)
    return path


def test_an_uploaded_external_link_is_refused(tmp_path):
    secret = _secret(tmp_path)
    data = _hdf5(lambda f: f.create_group("a/b").__setitem__("c", h5py.ExternalLink(str(secret), "/counts")))
    with pytest.raises(InputError, match='refers to another file at "a/b/c"'):
        Desk(tmp_path).add_upload("x.h5", data)


def test_an_uploaded_dataset_stored_elsewhere_is_refused(tmp_path):
    (tmp_path / "raw").write_bytes(bytes(512))
    data = _hdf5(lambda f: f.create_dataset("counts", (64,), "f8", external=[(str(tmp_path / "raw"), 0, 512)]))
    with pytest.raises(InputError, match='refers to another file at "counts"'):
        Desk(tmp_path).add_upload("x.h5", data)


def test_an_uploaded_virtual_dataset_is_refused(tmp_path):
    layout = h5py.VirtualLayout((64,), "f8")
    layout[:] = h5py.VirtualSource(str(_secret(tmp_path)), "counts", shape=(64,))
    data = _hdf5(lambda f: f.create_virtual_dataset("counts", layout))
    with pytest.raises(InputError, match='refers to another file at "counts"'):
        Desk(tmp_path).add_upload("x.h5", data)


def test_an_uploaded_file_with_a_link_in_a_circle_ends(tmp_path):
    def write(file):
        file["counts"] = np.ones(64)
        file["group/again"] = file["/"]

    uploads.refuse_links("x.h5", _hdf5(write))


def test_a_damaged_upload_is_named(tmp_path):
    data = _hdf5(lambda f: f.create_dataset("counts", data=np.ones(4096)))
    with pytest.raises(InputError, match=r"x\.h5: is damaged"):
        uploads.refuse_links("x.h5", data[:600])


def test_the_bound_holds_without_the_server_too(monkeypatch):
    monkeypatch.setattr(uploads, "LARGEST_UPLOAD_BYTES", 2**20)
    with pytest.raises(InputError, match="larger than 1 MB"):
        uploads.refuse_links("x.txt", bytes(2**20 + 1))
