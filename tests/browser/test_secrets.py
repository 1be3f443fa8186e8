"""No page but the desk's own can look at it or decide anything."""

from __future__ import annotations

import http.client
import re
import threading
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from urllib.parse import urlparse

import pytest
from desk_driver import DeskProcess, Page

from starfathom.decisions import DecisionLog


def ask(address: str, path: str, method: str = "GET", **headers: str) -> tuple[int, str]:
    parts = urlparse(address)
    connection = http.client.HTTPConnection(parts.hostname, parts.port, timeout=10)
    connection.request(method, path, headers=headers)
    answer = connection.getresponse()
    if answer.status == 101:
        connection.close()
        return 101, ""
    return answer.status, answer.read().decode("utf-8", "replace")


def handshake(address: str, path: str, origin: str, protocols: str) -> int:
    return ask(address, path, Upgrade="websocket", Connection="Upgrade", Origin=origin,
               **{"Sec-WebSocket-Version": "13", "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==",
                  "Sec-WebSocket-Protocol": protocols})[0]


def session_token(address: str) -> str:
    """A token the desk signs into its own page: the most that another page could ever get hold of."""
    found = re.search(r'"token":"([^"]+)"', ask(address, urlparse(address).path)[1])
    assert found
    return found.group(1)


def test_without_the_secret_there_is_nothing(desk):
    for path in ("/", "/ws", "/static/js/bokeh.min.js", "/metadata", "/autoload.js", "/wrong/", "/wrong/ws"):
        assert ask(desk.address, path)[0] == 404, path
    assert ask(desk.address, urlparse(desk.address).path)[0] == 200


def test_it_listens_on_this_machine_only(desk):
    import psutil

    held = [c for c in psutil.Process(desk.process.pid).net_connections() if c.status == psutil.CONN_LISTEN]
    assert {c.laddr.ip for c in held} == {"127.0.0.1"}


@pytest.mark.parametrize("method", ["POST", "PUT", "DELETE", "PATCH"])
def test_nothing_can_be_posted(desk, method):
    assert ask(desk.address, urlparse(desk.address).path, method)[0] in (403, 405)


def test_the_websocket_knows_its_own_page(desk):
    path, protocols = urlparse(desk.address).path + "ws", f"bokeh, {session_token(desk.address)}"
    assert handshake(desk.address, path, desk.origin, protocols) == 101
    assert handshake(desk.address, path, "http://127.0.0.1:1", protocols) == 403
    assert handshake(desk.address, path, "https://evil.example", protocols) == 403
    assert handshake(desk.address, path, "null", protocols) == 403


def test_settings_of_the_library_cannot_open_it(night, monkeypatch):
    """Environment variables that would let any page in, or fetch scripts from elsewhere, are not listened to."""
    monkeypatch.setenv("BOKEH_ALLOW_WS_ORIGIN", "*")
    monkeypatch.setenv("BOKEH_RESOURCES", "cdn")
    desk = DeskProcess(night / "th17_09.fits")
    try:
        path = urlparse(desk.address).path
        status, page = ask(desk.address, path)
        assert status == 200 and "https://" not in page.replace("http://www.w3.org", "")
        protocols = f"bokeh, {session_token(desk.address)}"
        assert handshake(desk.address, path + "ws", "https://evil.example", protocols) == 403
        assert handshake(desk.address, path + "ws", desk.origin, protocols) == 101
    finally:
        desk.stop()


EVIL = """<!DOCTYPE html><title>waiting</title><script>
const attempts = []
const socket = (url, protocols) => new Promise((done) => {
  const s = new WebSocket(url, protocols)
  s.onopen = () => { s.send("{}"); done("open") }
  s.onerror = () => done("refused")
})
const read = (url, options) => fetch(url, options).then((r) => r.type === "opaque" ? "opaque" : "read", () => "refused")
Promise.all([
  socket("SOCKET", ["bokeh", "TOKEN"]), socket("BARE/ws", ["bokeh", "TOKEN"]),
  read("PAGE"), read("PAGE", {method: "POST", body: "accept", headers: {"content-type": "application/json"}}),
]).then((all) => { document.title = all.join(" ") })
</script>"""


def test_a_page_of_another_origin_cannot_decide(chromium, desk, night):
    """The page knows the secret address and even a signed token, and still gets nowhere."""
    html = EVIL.replace("SOCKET", desk.address.replace("http", "ws", 1) + "ws")
    html = html.replace("TOKEN", session_token(desk.address)).replace("BARE", desk.origin.replace("http", "ws", 1))
    html = html.replace("PAGE", desk.address)

    class Evil(BaseHTTPRequestHandler):
        def do_GET(self):
            self.send_response(200)
            self.send_header("Content-Type", "text/html")
            self.end_headers()
            self.wfile.write(html.encode())

        def log_message(self, *words):
            pass

    log = DecisionLog(night / "decisions.jsonl")
    before = log.history()
    server = ThreadingHTTPServer(("127.0.0.1", 0), Evil)
    threading.Thread(target=server.serve_forever, daemon=True).start()
    try:
        chromium.get(f"http://127.0.0.1:{server.server_port}/")
        for _ in range(200):
            if chromium.title != "waiting":
                break
            threading.Event().wait(0.05)
        assert chromium.title == "refused refused refused refused"
    finally:
        server.shutdown()
    assert log.history() == before
    page = Page(chromium, desk.address)                      # and the desk itself is none the worse
    assert page.severe() == []
