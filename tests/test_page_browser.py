"""The page in a real browser: a run by clicks and keys, reloads, watchers, the set-up by drag and keyboard, its layout.

Where the environment variable AXE_CORE names the file axe.min.js of axe-core, its accessibility checks run too.
"""

import json
import os
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from browser import CHROMIUM, Browser, Tab
from guided import PLAN, STOPS, MemoryKeeper, small_camera, small_station
from test_frame import Camera as EdgeCamera
from test_framing import STATION as FRAME_STATION

from sweep.capture import Action, Ask, Begin, Event, Finished, Live, conduct
from sweep.demo import SimulatedHand
from sweep.frame import set_up
from sweep.framing import Sight
from sweep.screens.page import Door, FramePage, RunPage, open_door

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no chromium here: install it to try the page in a browser")

STATION = small_station()
FRAME_S = 0.03
SIZES = {"phone": (390, 844), "tablet": (820, 1180), "desktop": (1400, 900)}
AXE = os.environ.get("AXE_CORE")


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    with Browser(tmp_path_factory.mktemp("profile")) as opened:
        yield opened


class GuidedRun:
    """A guided run with its page, in a thread; a simulated hand turns the ring, the browser does all the rest."""

    def __init__(self) -> None:
        self.door = open_door("127.0.0.1")
        self.keeper = MemoryKeeper()
        self.finished: Finished | None = None
        self.holds = threading.Event()
        self._thread = threading.Thread(target=self._go, daemon=True)
        self._thread.start()

    def join(self) -> None:
        self.holds.clear()
        self._thread.join(60)
        assert not self._thread.is_alive()

    def _go(self) -> None:
        camera = small_camera(STATION)
        hand = SimulatedHand(camera, STOPS)
        waiting: list[Ask] = []
        with RunPage(STATION, self.door) as page:

            def show(event: Event) -> Action:
                answer = page(event)
                time.sleep(FRAME_S)
                if isinstance(event, Ask) and self.holds.is_set():
                    waiting[:] = [event]  # the hand does what it is asked later, so that the browser may act at leisure
                elif not isinstance(event, Begin):
                    if waiting and not self.holds.is_set():
                        hand(waiting.pop())
                    hand(event)
                return answer

            self.finished = conduct(Live(camera, STATION), self.keeper, STATION, PLAN, show)


@pytest.fixture
def run() -> GuidedRun:
    return GuidedRun()


@pytest.fixture
def frame(tmp_path: Path) -> Iterator[tuple[Door, Path, list[Sight]]]:
    file = tmp_path / "station.toml"
    file.write_text(FRAME_STATION, encoding="utf-8")
    door, last = open_door("127.0.0.1"), []

    def go() -> None:
        with FramePage(door) as page:

            def show(sight: Sight) -> object:
                time.sleep(FRAME_S)
                return page(sight)

            last.append(set_up(EdgeCamera(), file, show))

    thread = threading.Thread(target=go, daemon=True)
    thread.start()
    yield door, file, last
    thread.join(30)


def text(tab: Tab, selector: str) -> str:
    return str(tab.js(f"document.querySelector({json.dumps(selector)}).textContent"))


def shown(selector: str) -> str:
    """An expression: whether an element is to be seen."""
    return f"document.querySelector({json.dumps(selector)})?.checkVisibility() === true"


def through(tab: Tab, press: Callable[[], None], until: str) -> None:
    """Press whenever the page asks for it, until an expression is true."""
    until_s = time.monotonic() + 200
    while time.monotonic() < until_s:
        if tab.js(until):
            return
        if tab.js("state?.phase === 'ask' && state.hint.includes('“Take now”')"):
            press()
        time.sleep(0.1)
    raise AssertionError(f"never: {until}")


def still(tab: Tab, run: GuidedRun) -> None:
    """Let the hand wait; what it had begun goes on to the next stop's question."""
    run.holds.set()
    tab.wait("state.hint.startsWith('Turn the ring')")


def end(tab: Tab, run: GuidedRun) -> None:
    tab.click('[data-action="end"]')
    tab.wait(shown("#end-yes"))
    tab.click("#end-yes")
    run.join()
    assert run.finished.ended


def test_a_run_by_clicks_with_a_reload_in_the_middle(browser, run):
    tab = browser.page(run.door.address, width=390, height=844)
    tab.wait(shown("#cautions li"))
    assert text(tab, "#take") == "Start"
    tab.click("#take")
    tab.wait("state.progress.number === 1")
    through(tab, lambda: tab.click("#take"), "state.progress.number >= 2")
    tab.wait("document.querySelector('#live').naturalWidth > 0")
    assert tab.js("document.querySelectorAll('#overlay .patch').length") == 4
    still(tab, run)
    before = tab.js("JSON.stringify([state.do, state.step, state.progress, state.buttons])")
    tab.go(run.door.address)
    tab.wait("state !== null && you.acting")
    assert tab.js("JSON.stringify([state.do, state.step, state.progress, state.buttons])") == before
    run.holds.clear()
    through(tab, lambda: tab.click("#take"), "over")
    run.join()
    assert run.finished.taken == STOPS
    assert text(tab, "#do") == "All frames are taken"
    assert not tab.js(shown("#actions"))
    assert tab.complaints() == []


def test_a_run_by_keyboard_alone_never_loses_the_focus(browser, run):
    tab = browser.page(run.door.address, width=1400, height=900)
    tab.wait(shown("#take"))
    for _ in range(12):
        tab.key("Tab", 9)
        if tab.js("document.activeElement.id") == "take":
            break
    tab.key("Enter", 13, "\r")
    tab.wait("state.progress.number === 1")
    assert tab.js("document.activeElement.id") == "take"
    assert tab.js("getComputedStyle(document.activeElement).outlineWidth") == "4px"
    through(tab, lambda: tab.key(" ", 32, " "), "state.progress.number >= 2")
    run.holds.set()
    tab.wait("document.activeElement.id === 'take'")
    for _ in range(4):
        tab.key("Tab", 9)
    assert tab.js("document.activeElement.dataset.action") == "end"
    tab.key("Enter", 13, "\r")
    tab.wait("document.querySelector('#end-dialog').open")
    assert tab.js("document.activeElement.id") == "end-no"  # not the one that ends
    tab.key("Escape", 27)
    tab.wait("!document.querySelector('#end-dialog').open")
    end(tab, run)
    assert tab.complaints() == []


def test_a_second_browser_watches_and_may_take_over(browser, run):
    first = browser.page(run.door.address, width=390, height=844)
    first.wait(shown("#take"))
    second = browser.page(run.door.address, width=1400, height=900)
    second.wait(shown("#watch"))
    assert not second.js(shown("#actions"))
    assert text(second, "#do") == text(first, "#do")
    first.wait("document.querySelector('#link').textContent === 'Live, 2 browsers'")
    second.click("#seat")
    second.wait(shown("#take"))
    first.wait(shown("#watch"))
    second.click("#take")
    first.wait("state.progress.number === 1")
    end(second, run)
    first.wait("over")


def test_sounds_differ_and_come_once_and_the_screen_is_kept_on(browser, run):
    tab = browser.page(run.door.address, width=820, height=1180)
    tab.wait(shown("#take"))
    assert text(tab, "#sound") == "Touch for sound"
    tab.js("window.heard = []; const real = sound; sound = (kind) => { window.heard.push(kind); real(kind); }; 0")
    tab.click("#take")
    tab.wait("document.querySelector('#sound').textContent === 'Sound on'")
    tab.wait("awake !== null || !navigator.wakeLock")
    through(tab, lambda: tab.click("#take"), "state.progress.number >= 2")
    tab.wait("window.heard.includes('taken')")
    still(tab, run)
    # Each by its own rhythm: numbers and lengths of notes differ, not pitch alone.
    rhythms = tab.js("JSON.stringify(Object.values(SOUNDS).map((s) => s.notes.map((n) => [n[1], n[2]])))")
    assert len({json.dumps(rhythm) for rhythm in json.loads(rhythms)}) == 3
    count = tab.js("window.heard.length")
    tab.go(run.door.address)  # a reload plays nothing again
    tab.wait("state !== null")
    tab.js("window.heard = []; sound = (kind) => window.heard.push(kind); 0")
    time.sleep(1)
    assert tab.js("window.heard.length") == 0 < count
    assert text(tab, "#sound") == "Touch for sound"
    tab.click("#sound")
    tab.wait("document.querySelector('#sound').textContent === 'Sound on'")
    tab.click("#sound")
    tab.wait("document.querySelector('#sound').textContent === 'Sound off'")
    end(tab, run)


def test_a_lost_connection_is_said_and_mended_by_itself(browser, run):
    tab = browser.page(run.door.address, width=390, height=844)
    tab.wait(shown("#take"))
    tab.click("#take")
    tab.wait("state.progress.number === 1")
    run.holds.set()
    tab.call("Network.emulateNetworkConditions", offline=True, latency=0, downloadThroughput=-1, uploadThroughput=-1)
    tab.js("source.close(); heard = performance.now() - 6000; 0")  # as after some silent seconds
    tab.wait(shown("#lost"))
    assert "Nothing is lost" in text(tab, "#lost-words")
    assert tab.js("document.querySelector('#take').getAttribute('aria-disabled')") == "true"
    tab.call("Network.emulateNetworkConditions", offline=False, latency=0, downloadThroughput=-1, uploadThroughput=-1)
    tab.wait("!document.querySelector('#lost').checkVisibility()")
    assert tab.js("state.progress.number") == 1
    end(tab, run)


@pytest.mark.parametrize("dark", [False, True], ids=["light", "dark"])
def test_targets_are_large_named_and_nothing_is_cut_off(browser, run, dark):
    tab = browser.page(run.door.address, width=390, height=844)
    tab.wait(shown("#take"))
    tab.click("#take")
    through(tab, lambda: tab.click("#take"), "state.progress.number >= 2")
    still(tab, run)
    for width, height in SIZES.values():
        tab.resize(width, height, dark=dark)
        assert well_laid_out(tab) == []
    tab.resize(320, 640, dark=dark)  # a page at 400 % on a desktop: WCAG 2.2, 1.4.10 Reflow
    assert well_laid_out(tab) == []
    axe(tab)
    end(tab, run)


def well_laid_out(tab: Tab) -> list[str]:
    """Controls under 64 px (for gloved fingers), without a name, or a page wider than its window."""
    return json.loads(
        str(
            tab.js("""JSON.stringify([
              ...[...document.querySelectorAll('button, input')].filter((e) => e.checkVisibility()).flatMap((e) => {
                const b = e.getBoundingClientRect(), name = e.id || e.textContent, wrong = [];
                if (Math.min(b.width, b.height) < 63.5) wrong.push(name + ' is ' + b.width + ' x ' + b.height);
                if (!(e.textContent || e.labels?.[0]?.textContent || '').trim()) wrong.push(name + ' has no name');
                if (e.scrollWidth > e.clientWidth + 1) wrong.push(name + ' is cut off');
                return wrong;
              }),
              ...(document.documentElement.scrollWidth > innerWidth ? ['wider than the window'] : []),
            ])""")
        )
    )


def axe(tab: Tab) -> None:
    """No serious fault by axe-core, where it is there."""
    if AXE is None:
        return
    tab.call("Runtime.evaluate", expression=Path(AXE).read_text(encoding="utf-8"))
    found = tab.js(
        "axe.run(document).then((r) => JSON.stringify(r.violations.map((v) => [v.impact, v.id, v.nodes[0].html])))"
    )
    faults = json.loads(str(found))
    assert [fault for fault in faults if fault[0] in ("serious", "critical")] == []


# ---- the set-up


def test_patches_are_dragged_resized_and_saved(browser, frame):
    door, file, last = frame
    tab = browser.page(door.address, width=1400, height=900)
    tab.wait("document.querySelectorAll('#choices button').length === 3")
    tab.wait("document.querySelector('#scene').naturalWidth > 0")
    scale = float(str(tab.js("state.frame.width / document.querySelector('#patches').clientWidth")))
    x, y = centre(tab, "#patches .patch:nth-child(1) .edge")
    tab.drag([(x, y), (x + 10, y), (x + 30, y + 12)])
    tab.wait("state.changed && local.size === 0")
    moved = json.loads(str(tab.js("JSON.stringify(state.patches[0].region)")))
    assert moved[0] == pytest.approx(20 + 30 * scale, abs=1)
    assert moved[1] == pytest.approx(30 + 12 * scale, abs=1)
    assert moved[2:] == [80, 100]
    x, y = centre(tab, "#patches .patch:nth-child(1) .corner-grip[data-corner='3']")
    tab.drag([(x, y), (x + 10, y), (x + 24, y - 18)])
    tab.wait("state.patches[0].region[2] !== 80 && local.size === 0")
    sized = json.loads(str(tab.js("JSON.stringify(state.patches[0].region)")))
    assert sized[:2] == moved[:2]
    assert sized[2] == pytest.approx(80 + 24 * scale, abs=1)
    assert sized[3] == pytest.approx(100 - 18 * scale, abs=1)
    tab.click("#save")
    tab.wait("document.querySelector('#told').textContent.includes('Saved')")
    assert str(sized) in file.read_text(encoding="utf-8")
    assert "# the lane for vial caps" in file.read_text(encoding="utf-8")
    tab.click("#done")
    tab.wait("over")
    assert not last or not last[0].changed
    assert tab.complaints() == []


def test_patches_are_moved_by_keyboard_and_numbers_and_put_back(browser, frame):
    door, file, _ = frame
    tab = browser.page(door.address, width=820, height=1180)
    tab.wait("document.querySelectorAll('#choices button').length === 3")
    tab.js("document.querySelectorAll('#patches .patch')[1].focus()")
    assert text(tab, "#chosen-name") == "tray floor 2"
    for _ in range(3):
        tab.key("ArrowRight", 39)
    tab.key("ArrowDown", 40, modifiers=8)
    tab.wait("String(state.patches[1].region) === '203,40,64,64'")
    tab.js("document.querySelector('#place-2').focus(); document.querySelector('#place-2').select()")
    for digit in "72":
        tab.key(digit, ord(digit), digit)
    tab.key("Tab", 9)
    tab.wait("String(state.patches[1].region) === '203,40,72,64'")
    tab.click('[data-by="-2,0,4,0"]')
    tab.wait("String(state.patches[1].region) === '201,40,76,64'")
    tab.click("#revert")
    tab.wait("!state.changed && String(state.patches[1].region) === '200,30,64,64'")
    # Beyond the frame it stops at the border.
    tab.js("place(1, [9999, -50, 64, 64], true)")
    tab.wait("String(state.patches[1].region) === '256,0,64,64'")
    tab.click("#done")
    tab.wait(shown("#leave-drop"))
    tab.click("#leave-drop")
    tab.wait("over")
    assert file.read_text(encoding="utf-8") == FRAME_STATION
    assert tab.complaints() == []


@pytest.mark.parametrize("dark", [False, True], ids=["light", "dark"])
def test_the_set_up_is_well_laid_out(browser, frame, dark):
    tab = browser.page(frame[0].address, width=390, height=844)
    tab.wait("document.querySelectorAll('#choices button').length === 3")
    for width, height in SIZES.values():
        tab.resize(width, height, dark=dark)
        assert well_laid_out(tab) == []
    axe(tab)
    tab.click("#done")
    tab.wait("over")


def centre(tab: Tab, selector: str) -> tuple[float, float]:
    box = tab.js(
        f"(() => {{ const b = document.querySelector({json.dumps(selector)}).getBoundingClientRect();"
        " return [b.x + b.width / 2, b.y + b.height / 2]; })()"
    )
    return box[0], box[1]
