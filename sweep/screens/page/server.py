"""The page's server, in a thread of its own: the page, news as server-sent events, pictures, and what people press.

It never holds the run up: the run only leaves its latest state here; every browser takes the latest when it can, and
what it cannot take is passed over. One browser acts, the others watch.
"""

import asyncio
import json
import re
import threading
import time
from collections import Counter
from collections.abc import AsyncIterator, Mapping
from importlib.resources import files
from types import TracebackType
from typing import Any, Protocol, Self

import uvicorn
from starlette.applications import Starlette
from starlette.requests import ClientDisconnect, Request
from starlette.responses import HTMLResponse, PlainTextResponse, Response, StreamingResponse
from starlette.routing import Route

from sweep.screens.page.connection import BoundedConnection
from sweep.screens.page.gate import Door, Gate, policy_for

MOST_BROWSERS = 8
LARGEST_BODY = 4096
BODY_S = 5.0
NEWS_S = 0.08
BEAT_S = 2.0
SEAT_KEPT_S = 6.0  # for a browser that reloads or was out of reach
FAREWELL_S = 1.5
CLIENT = re.compile(r"[A-Za-z0-9-]{1,40}")

State = Mapping[str, Any]


class Refused(Exception):
    """What was asked cannot be done now; the text says why."""


class Subject(Protocol):
    """What the page is about. The server calls it from its own thread."""

    @property
    def version(self) -> int:
        """Grows with every change of the state."""

    def state(self) -> State:
        """All that the page shows, ready for JSON."""

    def picture(self, part: int | None) -> bytes | None:
        """The latest picture as JPEG, or a part of it by number; None where there is none."""

    def act(self, wish: Mapping[str, Any]) -> None:
        """Do what somebody pressed. Raises Refused, or ValueError where the wish makes no sense."""


class PageServer:
    """Serves one subject behind a door; opened around the run."""

    def __init__(self, subject: Subject, door: Door) -> None:
        self._subject = subject
        self._door = door
        self._seats = _Seats()
        self._closing = False
        self._told: tuple[int, str] | None = None
        html = files("sweep.screens.page").joinpath("page.html").read_text(encoding="utf-8")
        self._html = html
        routes = [
            Route("/", self._page),
            Route("/news", self._events),
            Route("/picture", self._picture),
            Route("/act", self._act, methods=["POST"]),
        ]
        config = uvicorn.Config(
            Gate(Starlette(routes=routes), door, policy_for(html)),
            http=BoundedConnection,
            ws="none",
            lifespan="off",
            log_config=None,
            log_level="critical",
            access_log=False,
            server_header=False,
            timeout_keep_alive=10,
            timeout_graceful_shutdown=1,
            h11_max_incomplete_event_size=16384,
        )
        self._server = uvicorn.Server(config)
        self._thread = threading.Thread(
            target=self._server.run, kwargs={"sockets": [door.socket]}, name="page", daemon=True
        )

    @property
    def browsers(self) -> int:
        """How many look at the page now."""
        return self._seats.taken

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Let every browser have the last state, then stop."""
        self._closing = True
        until_s = time.monotonic() + FAREWELL_S
        while self._seats.taken and time.monotonic() < until_s:
            time.sleep(0.02)
        self._server.should_exit = True
        self._thread.join(3 * FAREWELL_S)

    async def _page(self, request: Request) -> Response:
        return HTMLResponse(self._html)

    async def _events(self, request: Request) -> Response:
        client = request.query_params.get("client", "")
        if not CLIENT.fullmatch(client):
            return PlainTextResponse("A browser must say which one it is.", 400)
        if self._seats.taken >= MOST_BROWSERS:
            return PlainTextResponse(f"{MOST_BROWSERS} browsers look at this already. Close one of them.", 503)
        return StreamingResponse(self._news(client), media_type="text/event-stream")

    async def _news(self, client: str) -> AsyncIterator[str]:
        """The whole state whenever it has changed, a beat while it has not, and a farewell."""
        self._seats.come(client)
        try:
            sent, sent_s = None, time.monotonic()
            while True:
                closing = self._closing
                now = (self._subject.version, *self._seats.seen_by(client))
                if now != sent:
                    sent, sent_s = now, time.monotonic()
                    you = json.dumps({"acting": now[1], "acted": now[2], "browsers": now[3]})
                    yield f'data: {{"you": {you}, "state": {self._state_text()}}}\n\n'
                elif time.monotonic() - sent_s > BEAT_S:
                    sent_s = time.monotonic()
                    yield "event: beat\ndata: -\n\n"
                if closing:
                    yield "event: farewell\ndata: -\n\n"
                    return
                await asyncio.sleep(NEWS_S)
        finally:
            self._seats.leave(client)

    def _state_text(self) -> str:
        """The state as JSON, made once for all browsers."""
        version = self._subject.version
        if self._told is None or self._told[0] != version:
            self._told = (version, json.dumps(self._subject.state(), allow_nan=False))
        return self._told[1]

    async def _picture(self, request: Request) -> Response:
        part = request.query_params.get("part")
        if part is not None and not re.fullmatch(r"\d{1,4}", part):
            return PlainTextResponse("A part is named by its number.", 400)
        jpeg = self._subject.picture(None if part is None else int(part))
        if jpeg is None:
            return PlainTextResponse("There is no picture yet.", 404)
        return Response(jpeg, media_type="image/jpeg")

    async def _act(self, request: Request) -> Response:
        if request.headers.get("content-type", "").partition(";")[0].strip().lower() != "application/json":
            return PlainTextResponse("What is pressed is sent as application/json.", 415)
        try:
            body = await asyncio.wait_for(_body(request), BODY_S)
            wish = json.loads(body, parse_constant=_no_number)
        except TimeoutError:
            return PlainTextResponse("The request did not come to its end.", 408, {"connection": "close"})
        except (ValueError, RecursionError, ClientDisconnect):
            return PlainTextResponse("That is not JSON.", 400)
        except Refused as refusal:
            return PlainTextResponse(str(refusal), 413, {"connection": "close"})
        client = wish.get("client") if isinstance(wish, dict) else None
        if not isinstance(client, str) or not CLIENT.fullmatch(client):
            return PlainTextResponse("A browser must say which one it is.", 400)
        return self._done(client, wish)

    def _done(self, client: str, wish: Mapping[str, Any]) -> Response:
        if wish.get("action") == "seat":
            self._seats.sit(client)
            return Response(status_code=204)
        if not self._seats.acts(client):
            return PlainTextResponse("This browser only watches. Press “Act from here” first.", 409)
        try:
            self._subject.act(wish)
        except Refused as refusal:
            return PlainTextResponse(str(refusal), 409)
        except (ValueError, TypeError, LookupError):
            return PlainTextResponse("There is no such thing to do here.", 400)
        return Response(status_code=204)


class _Seats:
    """The browsers that look on, and the one among them that acts; all calls but `taken` from the server's thread."""

    def __init__(self) -> None:
        self._present: Counter[str] = Counter()
        self.taken = 0
        self._acting: str | None = None
        self._left_s = 0.0

    def come(self, client: str) -> None:
        """A browser arrives: the first one acts, and so does one who finds the seat left for long."""
        left = self._acting is not None and not self._present[self._acting]
        if self._acting is None or (left and time.monotonic() - self._left_s > SEAT_KEPT_S):
            self._acting = client
        self._present[client] += 1
        self.taken += 1

    def leave(self, client: str) -> None:
        self.taken -= 1
        self._present[client] -= 1
        if not self._present[client]:
            del self._present[client]
            if client == self._acting:
                self._left_s = time.monotonic()

    def sit(self, client: str) -> None:
        """This browser acts from now on, whoever did before."""
        self._acting = client

    def acts(self, client: str) -> bool:
        return client == self._acting

    def seen_by(self, client: str) -> tuple[bool, bool, int]:
        """Whether this browser acts, whether the one that does is there, and how many there are."""
        return client == self._acting, self._acting in self._present, self.taken


async def _body(request: Request) -> bytes:
    """A request's body. Raises Refused where it is too long, without reading on."""
    body = b""
    async for chunk in request.stream():
        body += chunk
        if len(body) > LARGEST_BODY:
            raise Refused(f"At most {LARGEST_BODY} bytes are taken.")
    return body


def _no_number(name: str) -> float:
    raise ValueError(f"{name} is no JSON")
