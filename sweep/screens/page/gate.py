"""Who may come in: requests with the token in their address, to a host that is ours, from no other page.

The token keeps strangers on the network out, the checks of host and origin keep out other pages in the same browser
(DNS rebinding, requests across sites: OWASP Cross-Site Request Forgery Prevention Cheat Sheet).
"""

import base64
import hashlib
import ipaddress
import re
import secrets
import socket
from collections.abc import MutableMapping
from dataclasses import dataclass
from typing import Any

from starlette.datastructures import Headers, MutableHeaders
from starlette.responses import PlainTextResponse, RedirectResponse
from starlette.types import ASGIApp, Receive, Scope, Send

from sweep.errors import CaptureError, InputError

TOKEN_LETTERS = "abcdefghjkmnpqrstuvwxyz23456789"  # none that is taken for another when it is typed by hand
TOKEN_LENGTH = 14  # 69 bits
LOOPBACK_NAMES = frozenset({"localhost", "127.0.0.1", "::1"})
PLACE = re.compile(r"(?P<host>\[[0-9a-fA-F:.]+\]|[^:\[\]]+|[0-9a-fA-F:.]+?)(?::(?P<port>\d{1,5}))?")


@dataclass(frozen=True, slots=True)
class Door:
    """An open socket, the token, and the address to type or to photograph."""

    socket: socket.socket
    host: str
    port: int
    token: str

    @property
    def address(self) -> str:
        """The page's address with its token."""
        host = _reachable(self.host)
        return f"http://{f'[{host}]' if ':' in host else host}:{self.port}/{self.token}/"

    @property
    def is_local(self) -> bool:
        """Whether only this computer can reach it."""
        return ipaddress.ip_address(self.host).is_loopback

    def is_ours(self, name: str) -> bool:
        """Whether a request to a host of this name may be meant for us; a name of someone else's never is."""
        if name in LOOPBACK_NAMES or name == self.host:
            return True
        if self.is_local:
            return False
        if _is_ip(name):  # no name that could be made to point here
            return True
        own = socket.gethostname().lower()
        return name in (own, f"{own}.local")


def open_door(place: str) -> Door:
    """Listen at ADDRESS or ADDRESS:PORT (0 or none: any free port), with a new token.

    Raises InputError where that is no address of a network, CaptureError where it cannot be listened at.
    """
    found = PLACE.fullmatch(place.strip())
    host = found["host"].strip("[]") if found else ""
    host = "127.0.0.1" if host == "localhost" else host
    port = int(found["port"] or 0) if found else 0
    if not _is_ip(host) or port > 65535:
        raise InputError(
            f"--bind {place}: name an address of this computer, as 0.0.0.0 (all of its networks) or 192.168.1.5:8080."
        )
    try:
        family = socket.AF_INET6 if ":" in host else socket.AF_INET
        listening = socket.create_server((host, port), family=family, backlog=16)
    except OSError as error:
        raise CaptureError(
            f"The page cannot listen at {place}: {error.strerror}. Name another address or port with --bind."
        ) from None
    token = "".join(secrets.choice(TOKEN_LETTERS) for _ in range(TOKEN_LENGTH))
    return Door(listening, host, listening.getsockname()[1], token)


class Gate:
    """Lets requests through to the app that pass all checks, their path without the token; refuses the others."""

    def __init__(self, app: ASGIApp, door: Door, policy: str) -> None:
        self._app = app
        self._door = door
        self._headers = {
            "content-security-policy": policy,
            "cache-control": "no-store",
            "referrer-policy": "no-referrer",
            "x-content-type-options": "nosniff",
            "cross-origin-resource-policy": "same-origin",
        }

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        async def guarded(message: MutableMapping[str, Any]) -> None:
            if message["type"] == "http.response.start":
                MutableHeaders(scope=message).update(self._headers)
            await send(message)

        app: ASGIApp = self._refusal(scope) or self._app
        if app is self._app:
            scope = {**scope, "path": scope["path"][len(self._door.token) + 1 :]}
            if scope["path"] == "":
                app = RedirectResponse(f"/{self._door.token}/")
        await app(scope, receive, guarded)

    def _refusal(self, scope: Scope) -> PlainTextResponse | None:
        headers = Headers(scope=scope)
        host = headers.get("host", "")
        found = PLACE.fullmatch(host)
        if found is None or not self._door.is_ours(found["host"].strip("[]").lower()):
            return PlainTextResponse("This is not the host that you look for.", 421)
        token = scope["path"].split("/")[1] if scope["path"].startswith("/") else ""
        if not secrets.compare_digest(token.encode(), self._door.token.encode()):
            return PlainTextResponse("Nothing here. Open the whole address that the terminal shows.", 404)
        origin = headers.get("origin")
        if origin is None and scope["method"] not in ("GET", "HEAD"):
            return PlainTextResponse("A request that changes something must name its origin.", 403)
        if origin is not None and origin != f"http://{host}":
            return PlainTextResponse("Requests from other pages are refused.", 403)
        if headers.get("sec-fetch-site", "none") not in ("none", "same-origin") and not _is_visit(headers):
            return PlainTextResponse("Requests from other pages are refused.", 403)
        return None


def policy_for(html: str) -> str:
    """A content security policy under which the page's own inline script and style run, and nothing else does."""
    hashes = {
        tag: " ".join(f"'{_hash(text)}'" for text in re.findall(rf"<{tag}>(.*?)</{tag}>", html, re.DOTALL))
        for tag in ("script", "style")
    }
    return (
        f"default-src 'none'; script-src {hashes['script']}; style-src {hashes['style']}; img-src 'self' data:; "
        "connect-src 'self'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
    )


def _hash(text: str) -> str:
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()


def _is_visit(headers: Headers) -> bool:
    """Whether somebody follows a link to the page, not a page that reaches for it."""
    return headers.get("sec-fetch-mode") == "navigate" and headers.get("sec-fetch-dest") == "document"


def _is_ip(name: str) -> bool:
    try:
        ipaddress.ip_address(name)
    except ValueError:
        return False
    return True


def _reachable(host: str) -> str:
    """The address under which others find this computer, where it listens on all of its networks."""
    if not ipaddress.ip_address(host).is_unspecified:
        return host
    family, far = (socket.AF_INET6, "2001:db8::1") if ":" in host else (socket.AF_INET, "192.0.2.1")
    with socket.socket(family, socket.SOCK_DGRAM) as probe:
        try:
            probe.connect((far, 9))  # sends nothing: it only picks the network that leads away from here
            return str(probe.getsockname()[0])
        except OSError:
            return socket.gethostname()
