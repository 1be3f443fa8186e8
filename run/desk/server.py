"""The desk's server: on this machine only, behind a secret in the address, deaf to pages of other origins.

Every address the server answers, the websocket's among them, begins with a random token; without it there is nothing
but "404". The websocket, the only way in for a decision, is refused to any page whose origin is not this very server,
and sessions are signed with a key that is made afresh at each start.
"""

from __future__ import annotations

import json
import logging
import os
import secrets
import threading
from collections.abc import Sequence
from html import escape
from pathlib import Path
from typing import Any

from bokeh.application import Application
from bokeh.application.handlers.function import FunctionHandler
from bokeh.document import Document
from bokeh.models import ColumnDataSource, CustomJS
from bokeh.server.server import Server

from starfathom.classify.errors import RequestError
from starfathom.desk.night import Night
from starfathom.desk.palette import DARK, LIGHT
from starfathom.desk.session import Session
from starfathom.desk.view import View
from starfathom.desk.windows import Mark

HOST = "127.0.0.1"
PAGES = Path(__file__).parent / "pages"


class Desk:
    """One night on one server.

    Parameters
    ----------
    night : the stars; those not yet typed are typed in the background
    marks : features by name, for windows and line names
    port : 0 for any free one
    """

    def __init__(self, night: Night, marks: Sequence[Mark], port: int = 0) -> None:
        for name in ("BOKEH_ALLOW_WS_ORIGIN", "BOKEH_RESOURCES", "BOKEH_CDN_VERSION"):
            os.environ.pop(name, None)       # either would open the server, or the page, to other machines
        logging.getLogger("bokeh").setLevel(logging.ERROR)
        logging.getLogger("tornado").setLevel(logging.CRITICAL)
        self.night = night
        self.marks = marks
        self.token = secrets.token_urlsafe(18)
        self._desks: dict[Document, Handler] = {}
        try:
            self.server = Server(
                {"/": Application(FunctionHandler(self._open))}, port=port, address=HOST, prefix=f"/{self.token}",
                generate_session_ids=True, sign_sessions=True,
                secret_key=secrets.token_bytes(32), session_token_expiration=600, keep_alive_milliseconds=10000,
                unused_session_lifetime_milliseconds=60000, use_index=False, websocket_max_message_size=2**20,
            )
        except OSError as error:
            why = error.strerror or "taken"
            raise RequestError(f"port {port} cannot be used ({why}); leave --port out for a free one") from error
        self.port = int(self.server.port or 0)
        # the server's own list holds "localhost" alone, and only now is the port known
        self.server._tornado._websocket_origins = {f"{HOST}:{self.port}", f"localhost:{self.port}"}

    @property
    def address(self) -> str:
        """Where to point the browser."""
        return f"http://{HOST}:{self.port}/{self.token}/"

    def run(self) -> None:
        """Serve until interrupted."""
        self.server.start()
        threading.Thread(target=self._type_all, name="typing", daemon=True).start()
        self.server.io_loop.start()

    # ---- one page -------------------------------------------------------------------------------------------------

    def _open(self, doc: Document) -> None:
        session = Session(self.night, self.marks)
        view = View(session)
        view.refresh()
        message = ColumnDataSource(data={"n": [], "what": [], "values": []}, name="message")
        desk = Handler(doc, session, view)
        message.on_change("data", desk.heard)
        view.on_point = lambda cell: desk.do("move", {"cell": cell})
        view.spectrum.tags = [message, view.page]
        script = (PAGES / "desk.js").read_text(encoding="utf-8")
        doc.js_on_event("document_ready", CustomJS(code=script, args={
            "message": message, "page": view.page, **view.blink_groups}))
        doc.js_on_event("connection_lost", CustomJS(code="document.documentElement.classList.add('lost')"))
        for root in (view.spectrum, view.plane, view.strip):
            doc.add_root(root)
        doc.title = "Starfathom desk"
        html = (PAGES / "desk.html").read_text(encoding="utf-8")
        doc.template = html  # type: ignore[assignment]  # a text is taken too, with the base page at hand to extend
        css = (PAGES / "desk.css").read_text(encoding="utf-8")
        words = {k.replace("-", "_"): v for k, v in view.words().items()}
        doc.template_variables.update(
            words, log_path=escape(str(self.night.log.path)),
            desk_css=css.replace("LIGHT", LIGHT.css()).replace("DARK", DARK.css()))
        self._desks[doc] = desk

        def closed(context: Any) -> None:
            self._desks.pop(doc, None)

        doc.on_session_destroyed(closed)

    # ---- typing in the background ---------------------------------------------------------------------------------

    def _type_all(self) -> None:
        self.night.type_all(self._tell)

    def _tell(self) -> None:
        for doc, desk in tuple(self._desks.items()):
            doc.add_next_tick_callback(desk.redraw_soon)


class Handler:
    """From a message to a redraw. Keys pressed faster than the page draws share one redraw."""

    def __init__(self, doc: Document, session: Session, view: View) -> None:
        self.doc, self.session, self.view = doc, session, view
        self._due = False
        self._ahead: threading.Thread | None = None

    def heard(self, attr: str, old: Any, new: Any) -> None:
        """A message from the page."""
        try:
            for what, values in zip(new["what"], new["values"]):
                self.do(str(what), json.loads(values))
        except (ValueError, KeyError, TypeError):
            self.do("", {})

    def do(self, what: str, values: dict[str, Any]) -> None:
        """Carry out a command and redraw."""
        self.session.do(what, values)
        if what == "hello":
            self.view.forget_words()
        self.redraw_soon()

    def redraw_soon(self) -> None:
        """Draw once, after whatever else has come in."""
        if not self._due:
            self._due = True
            self.doc.add_next_tick_callback(self._redraw)

    def _redraw(self) -> None:
        self._due = False
        self.doc.hold("combine")
        try:
            self.view.refresh()
        finally:
            self.doc.unhold()
        self._make_ready()

    def _make_ready(self) -> None:
        """Read and prepare the next star while this one is being looked at."""
        if self._ahead is None or not self._ahead.is_alive():
            self._ahead = threading.Thread(target=self.session.night.make_ready, args=(self.session.upcoming(),),
                                           name="ahead", daemon=True)
            self._ahead.start()

