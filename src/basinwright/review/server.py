"""The review before one person on this machine: a loopback server that answers only to its own page."""

from __future__ import annotations

import asyncio
import base64
import hashlib
import hmac
import json
import secrets
import webbrowser
from collections.abc import Callable
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import tornado.httpserver
import tornado.netutil
import tornado.web

from basinwright.errors import BasinwrightError, InputRejected
from basinwright.review.drawing import Drawing, refusal
from basinwright.review.session import REVIEW_FIELD, STATES, Session

HOST = "127.0.0.1"
_MOST_BYTES = 1 << 20
Say = Callable[[str], None]


class Guarded(tornado.web.RequestHandler):
    """A request that must come from this machine's own page, with the token of this session."""

    session: Session
    drawing: Drawing

    def initialize(self, session: Session, drawing: Drawing, token: str, hosts: frozenset[str]) -> None:
        """Take what every request shares."""
        self.session, self.drawing, self.token, self.hosts = session, drawing, token, hosts

    def prepare(self) -> None:
        """Refuse other hosts, other origins and requests without the token."""
        host, origin = self.request.headers.get("Host", ""), self.request.headers.get("Origin")
        given = self.request.headers.get("X-Review-Token") or self.given_token()
        known = hmac.compare_digest(given.encode("utf-8", "replace"), self.token.encode())
        if host not in self.hosts or origin not in (None, f"http://{host}") or not known:
            raise tornado.web.HTTPError(403)

    def given_token(self) -> str:
        """Return the token that the address carries; only the page itself may be asked for so."""
        return ""

    def set_default_headers(self) -> None:
        """Keep the page to itself."""
        self.set_header("Server", "basinwright")
        self.set_header("Cache-Control", "no-store")
        self.set_header("X-Content-Type-Options", "nosniff")
        self.set_header("X-Frame-Options", "DENY")
        self.set_header("Referrer-Policy", "no-referrer")
        self.set_header("Cross-Origin-Resource-Policy", "same-origin")

    def write_error(self, status_code: int, **kwargs: Any) -> None:
        """Answer in plain words without a traceback."""
        del kwargs
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        self.finish({403: "refused: open the address that basinwright review printed"}.get(status_code, "not here"))

    def answer(self, **values: Any) -> None:
        """Send plain values with where the session stands."""
        session = self.session
        self.finish(
            {
                **values,
                "revision": session.revision,
                "unsaved": session.unsaved,
                "undo": session.position > 0,
                "redo": session.position < len(session.history),
            }
        )

    def asked(self) -> dict[str, Any]:
        """Return the request's JSON object."""
        try:
            values = json.loads(self.request.body)
        except ValueError:
            values = None
        if not isinstance(values, dict):
            raise tornado.web.HTTPError(400)
        return values


class Page(Guarded):
    """The page."""

    def given_token(self) -> str:
        """Return the token of the address."""
        return self.get_query_argument("token", "")

    def get(self) -> None:
        """Send it."""
        parts = _page_parts()
        self.set_header("Content-Type", "text/html; charset=utf-8")
        self.set_header("Content-Security-Policy", parts["policy"])
        about = {"run": self.session.about["name"], "states": STATES, "resumed": self.session.resumed}
        # Inside a script element of type application/json nothing runs; "<" is written so that none can end it.
        text = json.dumps(about, ensure_ascii=False).replace("<", "\\u003c")
        self.finish(parts["page"].replace("@@ABOUT@@", text))


class Queue(Guarded):
    """The list of outlets."""

    def get(self) -> None:
        """Send it, those first that need eyes first."""
        self.answer(outlets=self.session.queue())


class OneOutlet(Guarded):
    """An outlet as it stands."""

    def get(self) -> None:
        """Send it."""
        try:
            self.answer(outlet=self.drawing.outlet(self.get_query_argument("id", "")))
        except InputRejected as error:
            self.set_status(404)
            self.answer(problems=refusal(error))


class Act(Guarded):
    """What the person does."""

    def post(self, verb: str) -> None:
        """Try, do, undo, redo or save."""
        try:
            getattr(self, f"_{verb}")(self.asked())
        except InputRejected as error:
            self.set_status(422)
            self.answer(problems=refusal(error))
        except BasinwrightError as error:
            self.set_status(422)
            self.answer(problems=[str(error)])

    def _try(self, asked: dict[str, Any]) -> None:
        outlet_id = str(asked.get("id"))
        step = self.session.attempt(outlet_id, asked)
        self.answer(outlet=self.drawing.outlet(outlet_id, step.after, with_map=False))

    def _do(self, asked: dict[str, Any]) -> None:
        if asked.get("revision") != self.session.revision:
            fix = "the page has been brought up to date: do it again"
            raise InputRejected.one("review", "page", "was changed in another window", fix)
        outlet_id = str(asked.get("id"))
        step = self.session.do(outlet_id, asked)
        if step.field == REVIEW_FIELD:
            self.answer(outlet={"id": outlet_id, "mark": vars(step.after.mark)})
        else:
            self.answer(outlet=self.drawing.outlet(outlet_id))

    def _undo(self, asked: dict[str, Any]) -> None:
        self._walked(asked, self.session.undo())

    def _redo(self, asked: dict[str, Any]) -> None:
        self._walked(asked, self.session.redo())

    def _walked(self, asked: dict[str, Any], outlet_id: str | None) -> None:
        self.answer(outlet=self.drawing.outlet(outlet_id or str(asked.get("id"))))

    def _save(self, asked: dict[str, Any]) -> None:
        self.session.save()
        self.answer(outlet=self.drawing.outlet(str(asked.get("id"))), saved=True)

    def _discard(self, asked: dict[str, Any]) -> None:
        self.session.discard()
        self.answer(outlet=self.drawing.outlet(str(asked.get("id"))))


@cache
def _page_parts() -> dict[str, str]:
    """Return the page with its own style and script in it, and the policy that lets nothing else run."""
    here = files(__package__).joinpath("templates")
    report = files("basinwright.report").joinpath("templates", "report.css").read_text(encoding="utf-8")
    style, script, page = (here.joinpath(f"review.{end}").read_text(encoding="utf-8") for end in ("css", "js", "html"))
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    policy = (
        f"default-src 'none'; connect-src 'self'; img-src data:; style-src 'unsafe-inline'; "
        f"script-src 'sha256-{digest}'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
    )
    return {"page": page.replace("@@STYLE@@", report + style).replace("@@SCRIPT@@", script), "policy": policy}


def application(session: Session, token: str, port: int) -> tornado.web.Application:
    """Return the web application of a session.

    Parameters
    ----------
    session : Session
    token : str
        Without it nothing is answered.
    port : int
        Where it listens: part of the only host names that are answered to.
    """
    shared = {
        "session": session,
        "drawing": Drawing(session),
        "token": token,
        "hosts": frozenset((f"{HOST}:{port}", f"localhost:{port}")),
    }
    return tornado.web.Application(
        [
            (r"/", Page, shared),
            (r"/api/queue", Queue, shared),
            (r"/api/outlet", OneOutlet, shared),
            (r"/api/(try|do|undo|redo|save|discard)", Act, shared),
        ],
        default_handler_class=Guarded,
        default_handler_args=shared,
        log_function=lambda handler: None,
    )


def serve(folder: Path, *, port: int = 0, say: Say, browser: bool = False) -> None:
    """Serve the review page of a run until interrupted.

    Parameters
    ----------
    folder : Path
        The run's folder.
    port : int
        Where to listen on this machine; 0 for any free one.
    say : callable
        Told the address.
    browser : bool
        Whether to open the address in the person's browser.

    Raises
    ------
    InputRejected
        Where the folder holds no run that can be reviewed, or the port is taken.
    """
    session = Session(folder)
    try:
        sockets = tornado.netutil.bind_sockets(port, HOST)
    except OSError as error:
        raise InputRejected.one(
            "command line", "--port", f"cannot be used ({error.strerror})", "leave it out"
        ) from None

    async def run() -> None:
        token = secrets.token_urlsafe(24)
        actual = sockets[0].getsockname()[1]
        server = tornado.httpserver.HTTPServer(application(session, token, actual), max_buffer_size=_MOST_BYTES)
        server.add_sockets(sockets)
        address = f"http://{HOST}:{actual}/?token={token}"
        if session.resumed:
            say(f"Taken up again: {session.resumed} steps that were not saved")
        say(f"Review: {address}")
        say("It answers on this machine only. Stop it with Ctrl-C; what is not saved is kept for the next time.")
        if browser:
            webbrowser.open(address)
        await asyncio.Event().wait()

    asyncio.run(run())
