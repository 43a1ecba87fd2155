"""The page's server: who comes in, what is refused, and what every browser gets. Over real sockets, with plain HTTP."""

import contextlib
import http.client
import itertools
import json
import socket
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import pytest

from sweep.errors import CaptureError, InputError
from sweep.screens.page.connection import MOST_SOCKETS
from sweep.screens.page.gate import Door, open_door
from sweep.screens.page.server import LARGEST_BODY, MOST_BROWSERS, PageServer, Refused


@dataclass
class Subject:
    """A subject of one number, which counts what it is asked."""

    version: int = 1
    wishes: list[Mapping[str, Any]] = field(default_factory=list)

    def state(self) -> dict[str, Any]:
        return {"mode": "wait", "number": self.version, "text": "line\nbreak – µ"}

    def picture(self, part: int | None) -> bytes | None:
        return b"jpeg" if part is None else None

    def act(self, wish: Mapping[str, Any]) -> None:
        if wish["action"] == "late":
            raise Refused("Too late.")
        if wish["action"] == "odd":
            raise ValueError
        self.wishes.append(wish)


@pytest.fixture
def served() -> Iterator[tuple[Subject, Door]]:
    subject, door = Subject(), open_door("127.0.0.1")
    with PageServer(subject, door):
        yield subject, door


def ask(
    door: Door, path: str = "", method: str = "GET", body: bytes | None = None, token: str | None = None, **headers: str
) -> tuple[int, bytes, Mapping[str, str]]:
    """Status, body and headers of one request; underscores in names of headers stand for hyphens."""
    connection = http.client.HTTPConnection("127.0.0.1", door.port, timeout=20)
    sent = {name.replace("_", "-"): value for name, value in headers.items()}
    try:
        connection.request(method, f"/{door.token if token is None else token}/{path}", body, sent)
        answer = connection.getresponse()
        return answer.status, answer.read(), dict(answer.getheaders())
    finally:
        connection.close()


def press(door: Door, client: str = "one", body: bytes | None = None, **wish: Any) -> tuple[int, bytes]:
    data = json.dumps({"client": client, **wish}).encode() if body is None else body
    origin = f"http://127.0.0.1:{door.port}"
    status, text, _ = ask(door, "act", "POST", data, origin=origin, content_type="application/json")
    return status, text


class News:
    """An open stream of news; `next` is the next event's name and data."""

    def __init__(self, door: Door, client: str = "one") -> None:
        self._connection = http.client.HTTPConnection("127.0.0.1", door.port, timeout=20)
        self._connection.request("GET", f"/{door.token}/news?client={client}")
        self.answer = self._connection.getresponse()

    def next(self) -> tuple[str, Any]:
        name, data = "message", None
        first = self.answer.readline()
        assert first, "the stream of news has ended"
        lines = itertools.chain([first], iter(self.answer.readline, b"\n"))
        for line in (raw.decode().rstrip("\n") for raw in lines):
            key, _, value = line.partition(": ")
            if key == "event":
                name = value
            else:
                data = value
        return name, None if data in (None, "-") else json.loads(data)

    def close(self) -> None:
        self.answer.close()
        self._connection.close()


@contextmanager
def watching(door: Door, client: str = "one") -> Iterator[News]:
    news = News(door, client)
    try:
        yield news
    finally:
        news.close()


# ---- who comes in


def test_with_the_token_the_page_comes_with_a_policy_and_no_other_source(served):
    status, body, headers = ask(served[1])
    assert status == 200
    assert headers["content-type"].startswith("text/html")
    assert "default-src 'none'" in headers["content-security-policy"]
    assert "unsafe" not in headers["content-security-policy"]
    assert headers["referrer-policy"] == "no-referrer"
    assert headers["cache-control"] == "no-store"
    assert b"http://www.w3.org/2000/svg" in body  # the name of a namespace, no address
    assert body.count(b"http") == body.count(b"http://www.w3.org/2000/svg")  # works offline


@pytest.mark.parametrize("path", ["", "news?client=one", "picture", "act"])
@pytest.mark.parametrize("token", ["", "x", "a" * 14, "A" * 200, "%00"])
def test_without_the_token_nothing_is_there(served, path, token):
    assert ask(served[1], path, token=token)[0] == 404


def test_a_token_cut_short_or_lengthened_is_none(served):
    token = served[1].token
    for wrong in (token[:-1], token + "a", token.upper(), f" {token}"):
        assert ask(served[1], token=wrong.replace(" ", "%20"))[0] == 404
    assert len({open_twice() for _ in range(5)}) == 5


def open_twice() -> str:
    door = open_door("127.0.0.1")
    door.socket.close()
    return door.token


@pytest.mark.parametrize("host", ["elsewhere.example", "127.0.0.1.elsewhere.example", "192.168.1.9", "", "a b", "[::1"])
@pytest.mark.parametrize("path", ["", "picture"])
def test_a_host_that_is_not_ours_is_refused(served, host, path):
    # DNS rebinding: another page's name is made to point at this computer.
    assert 400 <= ask(served[1], path, host=host)[0] < 500


@pytest.mark.parametrize("host", ["localhost", "127.0.0.1:9999", "[::1]:80", "LOCALHOST:1"])
def test_names_of_this_computer_are_ours(served, host):
    assert ask(served[1], host=host)[0] == 200


@pytest.mark.parametrize("origin", ["http://elsewhere.example", "null", "https://127.0.0.1", "http://127.0.0.1"])
def test_another_origin_is_refused(served, origin):
    subject, door = served
    body = json.dumps({"client": "one", "action": "take"}).encode()
    for path, method in (("act", "POST"), ("picture", "GET"), ("news?client=one", "GET")):
        assert ask(door, path, method, body, origin=origin, content_type="application/json")[0] == 403
    assert subject.wishes == []


def test_what_changes_something_must_name_its_origin(served):
    assert ask(served[1], "act", "POST", b"{}", content_type="application/json")[0] == 403


def test_other_sites_may_link_here_but_not_reach_in(served):
    door = served[1]
    visit = {"sec_fetch_site": "cross-site", "sec_fetch_mode": "navigate", "sec_fetch_dest": "document"}
    assert ask(door, **visit)[0] == 200
    assert ask(door, **{**visit, "sec_fetch_dest": "iframe"})[0] == 403
    assert ask(door, "picture", sec_fetch_site="cross-site", sec_fetch_mode="no-cors", sec_fetch_dest="image")[0] == 403
    assert ask(door, "picture", sec_fetch_site="same-origin")[0] == 200


def test_an_address_without_its_last_slash_leads_to_the_page(served):
    door = served[1]
    connection = http.client.HTTPConnection("127.0.0.1", door.port, timeout=20)
    connection.request("GET", f"/{door.token}")
    answer = connection.getresponse()
    assert (answer.status, answer.getheader("location")) == (307, f"/{door.token}/")
    connection.close()


def test_only_this_computer_is_listened_to_unless_asked(served):
    assert served[1].socket.getsockname()[0] == "127.0.0.1"
    assert served[1].address == f"http://127.0.0.1:{served[1].port}/{served[1].token}/"
    assert served[1].is_local


def test_all_networks_when_asked_then_under_an_address_of_this_computer():
    door = open_door("0.0.0.0")
    door.socket.close()
    assert not door.is_local
    assert "0.0.0.0" not in door.address
    assert door.is_ours("192.168.7.7")
    assert door.is_ours(socket.gethostname().lower())
    assert not door.is_ours("elsewhere.example")


@pytest.mark.parametrize(
    "place", ["", "elsewhere.example", "1.2.3", "127.0.0.1:99999", "127.0.0.1:x", ":80", "300.1.1.1"]
)
def test_what_is_no_address_is_refused_in_a_sentence(place):
    with pytest.raises(InputError, match="--bind"):
        open_door(place)


def test_a_port_that_is_taken_is_named(served):
    with pytest.raises(CaptureError, match="cannot listen"):
        open_door(f"127.0.0.1:{served[1].port}")


@pytest.mark.parametrize("place", ["[::1]", "[::1]:0", "localhost:0", "127.0.0.1:0"])
def test_ways_to_write_an_address(place):
    try:
        door = open_door(place)
    except CaptureError:
        pytest.skip("this computer has no IPv6")
    door.socket.close()
    assert door.address.startswith(("http://[::1]:", "http://127.0.0.1:"))


# ---- what is pressed


def test_what_is_pressed_reaches_the_subject(served):
    subject, door = served
    with watching(door):
        assert press(door, action="take", step=3)[0] == 204
    assert subject.wishes == [{"client": "one", "action": "take", "step": 3}]


@pytest.mark.parametrize(
    ("body", "status"),
    [
        (b"", 400),
        (b"{", 400),
        (b"[]", 400),
        (b"3", 400),
        (b"null", 400),
        (b"\xff\xfe", 400),
        (b"{}", 400),
        (b'{"client": 3}', 400),
        (b'{"client": "a b", "action": "take"}', 400),
        (b'{"client": "one"}', 400),
        (b'{"client": "one", "action": NaN}', 400),
        (b'{"client": "one", "action": ["take"]}', 204),
        (b'{"client": "one", "action": "odd"}', 400),
        (b'{"client": "one", "action": "late"}', 409),
        (b"[" * 4000, 400),
        (b" " * LARGEST_BODY + b"{}", 413),
        (b"x" * 10_000_000, 413),
    ],
    ids=range(17),
)
def test_malformed_and_huge_bodies_get_a_4xx(served, body, status):
    door = served[1]
    with watching(door):
        try:
            assert press(door, body=body)[0] == status
        except (ConnectionError, BrokenPipeError):
            assert status == 413  # cut off before all of it was sent
        assert press(door, action="take")[0] == 204  # and it serves on


def test_a_body_of_unstated_length_is_bounded_too(served):
    door = served[1]
    with socket.create_connection(("127.0.0.1", door.port), timeout=20) as raw:
        head = f"POST /{door.token}/act HTTP/1.1\r\nhost: 127.0.0.1\r\norigin: http://127.0.0.1\r\n"
        raw.sendall(head.encode() + b"content-type: application/json\r\ntransfer-encoding: chunked\r\n\r\n")
        for _ in range(8):
            raw.sendall(b"400\r\n" + b" " * 1024 + b"\r\n")
        assert b" 413 " in raw.recv(100)


@pytest.mark.parametrize("kind", ["text/plain", "application/x-www-form-urlencoded", ""])
def test_only_json_is_taken(served, kind):
    door = served[1]
    origin = f"http://127.0.0.1:{door.port}"
    assert ask(door, "act", "POST", b'{"client": "one"}', origin=origin, content_type=kind)[0] == 415


@pytest.mark.parametrize(("path", "method"), [("act", "GET"), ("", "POST"), ("news", "PUT"), ("picture", "DELETE")])
def test_other_methods_are_refused(served, path, method):
    origin = f"http://127.0.0.1:{served[1].port}"
    assert ask(served[1], path, method, origin=origin)[0] == 405


@pytest.mark.parametrize(
    "path", ["nothing", "news", "news?client=", "news?client=a%20b", "picture?part=x", "../etc/passwd"]
)
def test_other_paths_are_refused(served, path):
    assert 400 <= ask(served[1], path)[0] < 500


def test_pictures_come_as_jpeg_and_parts_only_where_there_are_some(served):
    status, body, headers = ask(served[1], "picture?n=17")
    assert (status, body, headers["content-type"]) == (200, b"jpeg", "image/jpeg")
    assert ask(served[1], "picture?part=2")[0] == 404


@pytest.mark.parametrize(
    "raw", [b"\r\n\r\n", b"GET\r\n\r\n", b"\x16\x03\x01\x02\x00", b"GET / HTTP/1.1\r\nhost: a\r\nhost: b\r\n\r\n"]
)
def test_what_is_no_http_is_answered_or_cut_off_and_harms_nothing(served, raw):
    door = served[1]
    with socket.create_connection(("127.0.0.1", door.port), timeout=20) as connection:
        connection.sendall(raw)
        connection.shutdown(socket.SHUT_WR)
        assert connection.recv(100) == b"" or True is not None
    assert ask(door)[0] == 200


# ---- what browsers see


def test_the_whole_state_comes_at_once_and_with_every_change(served):
    subject, door = served
    with watching(door) as news:
        name, first = news.next()
        assert name == "message"
        assert first["you"] == {"acting": True, "acted": True, "browsers": 1}
        assert first["state"] == subject.state()
        subject.version = 2
        assert news.next()[1]["state"]["number"] == 2
    with watching(door) as again:  # a reload
        assert again.next()[1]["state"] == subject.state()
        assert again.answer.getheader("content-type").startswith("text/event-stream")


def test_a_browser_that_is_slow_gets_the_latest_not_every_one(served):
    subject, door = served
    with watching(door) as news:
        news.next()
        for version in range(2, 200):
            subject.version = version
            time.sleep(0.002)
        numbers = []
        while not numbers or numbers[-1] < 199:
            numbers.append(news.next()[1]["state"]["number"])
        assert len(numbers) < 50


def test_silence_has_beats(served):
    with watching(served[1]) as news:
        news.next()
        assert news.next() == ("beat", None)


def test_the_first_browser_acts_the_second_watches_until_it_asks(served):
    subject, door = served
    with watching(door, "one") as one, watching(door, "two") as two:
        assert one.next()[1]["you"]["acting"]
        assert two.next()[1]["you"] == {"acting": False, "acted": True, "browsers": 2}
        status, text = press(door, "two", action="take")
        assert status == 409
        assert b"only watches" in text
        assert press(door, "two", action="seat")[0] == 204
        assert press(door, "two", action="take")[0] == 204
        assert press(door, "one", action="take")[0] == 409
        assert [wish["client"] for wish in subject.wishes] == ["two"]


def test_a_browser_that_reloads_keeps_its_seat(served):
    door = served[1]
    with watching(door, "one") as one:
        one.next()
    with watching(door, "two") as two:
        assert not two.next()[1]["you"]["acting"]
        with watching(door, "one") as one:
            assert one.next()[1]["you"]["acting"]


def test_a_seat_that_is_left_for_long_is_taken(served, monkeypatch):
    monkeypatch.setattr("sweep.screens.page.server.SEAT_KEPT_S", 0.1)
    door = served[1]
    with watching(door, "one") as one:
        one.next()
    time.sleep(1.0)  # until the server has noticed
    with watching(door, "two") as two:
        assert two.next()[1]["you"]["acting"]


def test_no_more_than_eight_browsers_look_on_and_a_place_becomes_free(served):
    door = served[1]
    all_of_them = [News(door, f"b{number}") for number in range(MOST_BROWSERS)]
    for news in all_of_them:
        news.next()
    assert ask(door, "news?client=late")[0] == 503
    assert ask(door)[0] == 200
    all_of_them.pop().close()
    until_s = time.monotonic() + 10
    while ask_status(door, "late") == 503 and time.monotonic() < until_s:
        time.sleep(0.1)
    assert ask_status(door, "late") == 200
    for news in all_of_them:
        news.close()


def ask_status(door: Door, client: str) -> int:
    with watching(door, client) as news:
        return news.answer.status


def test_sockets_are_bounded(served):
    door = served[1]
    idle = [socket.create_connection(("127.0.0.1", door.port), timeout=20) for _ in range(MOST_SOCKETS + 10)]
    time.sleep(0.5)
    cut = 0
    for connection in idle:
        connection.setblocking(False)
        try:
            cut += connection.recv(1) == b""
        except ConnectionError:
            cut += 1
        except BlockingIOError:
            pass
        connection.close()
    assert cut == 10


def test_a_head_that_never_ends_is_cut_off(monkeypatch):
    monkeypatch.setattr("sweep.screens.page.connection.REQUEST_S", 0.3)
    door = open_door("127.0.0.1")
    with PageServer(Subject(), door), socket.create_connection(("127.0.0.1", door.port), timeout=20) as slow:
        began_s = time.monotonic()
        drips = 0
        with contextlib.suppress(ConnectionError):
            while time.monotonic() - began_s < 20:  # a drip now and then gains no time
                slow.sendall(b"x")
                drips += 1
                time.sleep(0.05)
        assert 2 < drips < 200


def test_a_body_that_never_ends_is_answered(served, monkeypatch):
    monkeypatch.setattr("sweep.screens.page.server.BODY_S", 0.3)
    door = served[1]
    with socket.create_connection(("127.0.0.1", door.port), timeout=20) as slow:
        head = f"POST /{door.token}/act HTTP/1.1\r\nhost: 127.0.0.1\r\norigin: http://127.0.0.1\r\n"
        slow.sendall(head.encode() + b"content-type: application/json\r\ncontent-length: 100\r\n\r\n{")
        assert b" 408 " in slow.recv(100)


def test_one_who_takes_nothing_of_the_answer_is_cut_off(monkeypatch):
    monkeypatch.setattr("sweep.screens.page.connection.STALL_S", 0.5)

    class Talkative(Subject):
        def state(self) -> dict[str, Any]:
            return {"text": "x" * 1_000_000}

    subject, door = Talkative(), open_door("127.0.0.1")
    server = PageServer(subject, door)
    with server, socket.create_connection(("127.0.0.1", door.port), timeout=20) as deaf:
        deaf.sendall(f"GET /{door.token}/news?client=deaf HTTP/1.1\r\nhost: 127.0.0.1\r\n\r\n".encode())
        until_s = time.monotonic() + 20
        while server.browsers == 0 and time.monotonic() < until_s:
            time.sleep(0.05)
        while server.browsers == 1 and time.monotonic() < until_s:
            subject.version += 1
            time.sleep(0.05)
        assert server.browsers == 0
        assert ask(door)[0] == 200


def test_at_the_end_every_browser_has_the_last_state_and_a_farewell():
    subject, door = Subject(), open_door("127.0.0.1")
    with PageServer(subject, door):
        news = News(door)
        news.next()
        subject.version = 99
    names = []
    while True:
        name, data = news.next()
        names.append(name)
        if name == "farewell":
            break
        assert data["state"]["number"] == 99
    assert names == ["message", "farewell"]
    news.close()
    with pytest.raises(OSError):
        ask(door)


def test_an_end_with_nobody_there_is_quick():
    began_s = time.monotonic()
    with PageServer(Subject(), open_door("127.0.0.1")):
        time.sleep(0.3)
    assert time.monotonic() - began_s < 5
