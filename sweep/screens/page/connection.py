"""One connection of the page's server, bounded: few at once, none that dawdles over its request or its reading."""

import asyncio

import h11
from uvicorn.protocols.http.h11_impl import H11Protocol

MOST_SOCKETS = 32  # a browser opens up to six
REQUEST_S = 10.0  # for the head of a request
STALL_S = 10.0  # without taking anything of an answer


class BoundedConnection(H11Protocol):
    """HTTP as uvicorn speaks it. What is beyond the bounds is cut off, so that nobody can fill up the server."""

    _request_timer: asyncio.TimerHandle | None = None
    _stall_timer: asyncio.TimerHandle | None = None

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        """Take the connection in, or drop it where there are enough."""
        super().connection_made(transport)
        if len(self.connections) > MOST_SOCKETS:
            transport.abort()
            return
        self._wait_for_head()

    def data_received(self, data: bytes) -> None:
        """Hand bytes on; a request that they begin must come to its end in time."""
        super().data_received(data)
        self._wait_for_head()

    def pause_writing(self) -> None:
        """The other side takes nothing more: wait for it, but not for ever."""
        self.flow.pause_writing()
        self._stall_timer = self.loop.call_later(STALL_S, self.transport.abort)

    def resume_writing(self) -> None:
        """The other side goes on."""
        self.flow.resume_writing()
        if self._stall_timer is not None:
            self._stall_timer.cancel()
            self._stall_timer = None

    def connection_lost(self, exc: Exception | None) -> None:
        """Forget the timers with the connection."""
        for timer in (self._request_timer, self._stall_timer):
            if timer is not None:
                timer.cancel()
        super().connection_lost(exc)

    def _wait_for_head(self) -> None:
        # Not set anew while it runs: a request in drips gains nothing.
        if self._request_timer is None:
            self._request_timer = self.loop.call_later(REQUEST_S, self._see_to_head)

    def _see_to_head(self) -> None:
        self._request_timer = None
        if self.conn.their_state is h11.IDLE and (self.cycle is None or self.cycle.response_complete):
            self.transport.abort()
