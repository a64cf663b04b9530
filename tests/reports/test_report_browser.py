"""The page in a real browser: choosing, lighting up, keyboard, phone, paper, scripts off.

Skipped where no Chromium is installed. It is steered through a pipe, without any network.
"""

from __future__ import annotations

import base64
import io
import json
import os
import select
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import suppress
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from phaseid.matching.identification import Identification
from phaseid.reports.page import Provenance, page

BROWSER = next(
    (
        found
        for name in ("chromium", "chromium-browser", "google-chrome")
        if (found := shutil.which(name))
    ),
    None,
)
pytestmark = pytest.mark.skipif(
    BROWSER is None or os.name != "posix", reason="no Chromium here to open the page in"
)
SWITCHES = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--no-first-run",
    "--disable-extensions",
    "--disable-background-networking",
    "--remote-debugging-pipe",
]
AS_3_AND_4 = """
import fcntl, os, sys
high = [fcntl.fcntl(int(word), fcntl.F_DUPFD, 10) for word in sys.argv[1:3]]
for number, pipe in zip((3, 4), high):
    os.dup2(pipe, number)
os.execv(sys.argv[3], sys.argv[3:])
"""
LONGEST_WAIT_S = 30.0
EVIL = "</script><script>document.title='run'</script><img src=x onerror=document.title='run'>"


class _Browser:
    """Chromium's debugging protocol over two pipes: JSON messages, each ended by a zero byte."""

    def __init__(self, folder: Path) -> None:
        to_read, self._to = os.pipe()
        self._from, to_write = os.pipe()
        assert BROWSER is not None
        self._process = subprocess.Popen(
            [
                *(sys.executable, "-c", AS_3_AND_4, str(to_read), str(to_write)),
                *(BROWSER, *SWITCHES, f"--user-data-dir={folder}", "about:blank"),
            ],
            pass_fds=(to_read, to_write),
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        os.close(to_read)
        os.close(to_write)
        self._held = b""
        self._number = 0
        self.events: list[dict[str, Any]] = []
        self._session: str | None = None
        targets = self.ask("Target.getTargets")["targetInfos"]
        target = next(t["targetId"] for t in targets if t["type"] == "page")
        self._session = self.ask("Target.attachToTarget", targetId=target, flatten=True)[
            "sessionId"
        ]
        for domain in ("Page", "Runtime", "Log", "Network"):
            self.ask(f"{domain}.enable")

    def ask(self, method: str, **parameters: Any) -> dict[str, Any]:
        self._number += 1
        message: dict[str, Any] = {"id": self._number, "method": method, "params": parameters}
        if self._session is not None:
            message["sessionId"] = self._session
        os.write(self._to, json.dumps(message).encode() + b"\0")
        while (answer := self._next()).get("id") != self._number:
            self.events.append(answer)
        assert "error" not in answer, answer
        result: dict[str, Any] = answer["result"]
        return result

    def _next(self) -> dict[str, Any]:
        while b"\0" not in self._held:
            ready, _, _ = select.select([self._from], [], [], LONGEST_WAIT_S)
            assert ready, "the browser does not answer"
            more = os.read(self._from, 1 << 16)
            assert more, "the browser ended"
            self._held += more
        first, self._held = self._held.split(b"\0", 1)
        message: dict[str, Any] = json.loads(first)
        return message

    def open(self, path: Path) -> None:
        self.events.clear()
        self.ask("Page.navigate", url=path.as_uri())
        while not any(e.get("method") == "Page.loadEventFired" for e in self.events):
            self.events.append(self._next())

    def run(self, expression: str) -> Any:
        told = self.ask("Runtime.evaluate", expression=expression, returnByValue=True)
        assert "exceptionDetails" not in told, told
        return told["result"].get("value")

    def key(self, name: str) -> None:
        code = {"ArrowDown": 40, "Enter": 13, "Escape": 27}[name]
        text = {"text": "\r"} if name == "Enter" else {}
        for kind, more in (("keyDown", text), ("keyUp", {})):
            self.ask(
                "Input.dispatchKeyEvent", type=kind, key=name, windowsVirtualKeyCode=code, **more
            )

    def size(self, width: int, height: int) -> None:
        self.ask(
            "Emulation.setDeviceMetricsOverride",
            width=width,
            height=height,
            deviceScaleFactor=1,
            mobile=False,
        )

    def close(self) -> None:
        with suppress(OSError, AssertionError):
            self._session = None
            self.ask("Browser.close")
        self._process.wait(timeout=20)
        os.close(self._to)
        os.close(self._from)


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[_Browser]:
    one = _Browser(tmp_path_factory.mktemp("browser"))
    yield one
    one.close()


@pytest.fixture
def opened(browser: _Browser, answer: Identification, tmp_path: Path) -> _Browser:
    browser.size(1280, 900)
    _open(browser, answer, tmp_path)
    return browser


def _open(browser: _Browser, answer: Identification, folder: Path) -> None:
    path = folder / "report.html"
    path.write_text(page(answer, Provenance("phaseid report", "today")), encoding="utf-8")
    browser.open(path)


def _complaints(browser: _Browser) -> list[dict[str, Any]]:
    """What the console shows: blocked or failed resources, errors of scripts, what they print."""
    kinds = ("Log.entryAdded", "Runtime.exceptionThrown", "Runtime.consoleAPICalled")
    return [event for event in browser.events if event.get("method") in kinds]


LIT = "Array.from(document.querySelectorAll('.lit'), e => e.tagName + ' ' + e.dataset.key)"
SHOWN = (
    "Array.from(document.querySelectorAll('section.answer'))"
    ".filter(s => s.getClientRects().length).map(s => s.dataset.rank)"
)


def test_nothing_is_fetched_and_nothing_complains(opened: _Browser) -> None:
    asked = [
        e["params"]["request"]["url"]
        for e in opened.events
        if e.get("method") == "Network.requestWillBeSent"
    ]
    assert len(asked) == 1
    assert asked[0].startswith("file:")
    assert _complaints(opened) == []


def test_an_answer_is_chosen(opened: _Browser) -> None:
    assert opened.run(SHOWN) == ["1"]
    opened.run("document.getElementById('choose-2').click()")
    assert opened.run(SHOWN) == ["2"]


def test_a_ring_lights_up_in_table_and_picture(opened: _Browser) -> None:
    where = opened.run(
        "(() => {const row = document.querySelector('tr[data-key=p1r2]');"
        "row.scrollIntoView({block: 'center'}); const r = row.getBoundingClientRect();"
        "return [r.x + 20, r.y + r.height / 2]})()"
    )
    opened.ask("Input.dispatchMouseEvent", type="mouseMoved", x=where[0], y=where[1])
    lit = opened.run(LIT)
    assert "TR p1r2" in lit
    assert "g p1r2" in lit
    assert {word.split()[1] for word in lit} == {"p1r2"}
    assert opened.run("document.querySelector('g[data-key=p1r1]').matches('.lit')") is False


def test_clicking_through_everything_leaves_the_console_silent(opened: _Browser) -> None:
    opened.run(
        "for (const e of document.querySelectorAll('.choose, tr[data-key], .hit, .mark'))"
        "for (const kind of ['pointerover', 'click', 'focusin', 'keydown'])"
        "e.dispatchEvent(new KeyboardEvent(kind, {key: 'Enter', bubbles: true}))"
    )
    assert _complaints(opened) == []


def test_a_complaint_would_be_noticed(opened: _Browser) -> None:
    opened.run("setTimeout(() => {throw new Error('on purpose')}, 0)")
    opened.run("new Promise(done => setTimeout(done, 50))")
    opened.run("1")
    assert _complaints(opened) != []


def test_a_ring_is_hit_beside_its_line_and_told(opened: _Browser) -> None:
    where = opened.run(
        "(() => {const disc = document.querySelector('.disc svg');"
        "disc.scrollIntoView({block: 'center'});"
        "const ring = disc.querySelector('.mark[data-key=p1r4] path');"
        "const p = ring.getPointAtLength(ring.getTotalLength() * 0.3), m = ring.getScreenCTM();"
        "return [p.x * m.a + m.e + 3 * m.a, p.y * m.d + m.f]})()"
    )
    for kind in ("mousePressed", "mouseReleased"):
        opened.ask(
            "Input.dispatchMouseEvent",
            type=kind,
            x=where[0],
            y=where[1],
            button="left",
            clickCount=1,
        )
    opened.ask("Input.dispatchMouseEvent", type="mouseMoved", x=2, y=2)
    assert "TR p1r4" in opened.run(LIT)
    told = opened.run("document.querySelector('section:not([hidden]) .readout').textContent")
    assert told.startswith("Ring 4, measured 1.4360 Å, intensity 30; A Al 2 2 0 at 1.4317 Å")


def test_the_keyboard_does_it_too(opened: _Browser) -> None:
    opened.run("document.querySelector('tr[data-key=p1r1]').focus()")
    opened.key("ArrowDown")
    assert opened.run("document.activeElement.dataset.key") == "p1r2"
    opened.key("Enter")
    opened.run("document.activeElement.blur()")
    assert "g p1r2" in opened.run(LIT)
    opened.run("document.querySelector('tr[data-key=p1r1]').focus()")
    opened.key("Escape")
    assert opened.run(LIT) == []


def test_everything_is_there_with_scripts_off(
    browser: _Browser, answer: Identification, tmp_path: Path
) -> None:
    browser.ask("Emulation.setScriptExecutionDisabled", value=True)
    try:
        _open(browser, answer, tmp_path)
        assert browser.run(SHOWN) == ["1", "2"]
        assert browser.run("document.querySelector('.choose').getClientRects().length") == 0
    finally:
        browser.ask("Emulation.setScriptExecutionDisabled", value=False)


@pytest.mark.parametrize("width", [320, 390, 1280])
def test_the_page_is_no_wider_than_the_screen(opened: _Browser, width: int) -> None:
    opened.size(width, 800)
    assert opened.run("document.documentElement.scrollWidth") <= width


def test_other_entries_unfold(browser: _Browser, answer: Identification, tmp_path: Path) -> None:
    best = answer.hypotheses[0]
    other = replace(best.phases[0].phase, phase_id="Al-zzzz", name="another determination " * 4)
    part = replace(best.phases[0], entries=(other,) * 3)
    many = replace(answer, hypotheses=(replace(best, phases=(part, best.phases[1])),))
    browser.size(390, 800)
    _open(browser, many, tmp_path)
    shown = "document.querySelector('details table').checkVisibility()"
    assert browser.run(shown) is False
    browser.run("document.querySelector('summary').focus()")
    browser.key("Enter")
    assert browser.run(shown) is True
    assert browser.run("document.documentElement.scrollWidth") <= 390
    assert _complaints(browser) == []


def test_words_in_pictures_stay_readable_on_a_phone(opened: _Browser) -> None:
    opened.size(390, 800)
    smallest = opened.run(
        "Math.min(...Array.from(document.querySelectorAll('section:not([hidden]) svg text'),"
        "t => parseFloat(getComputedStyle(t).fontSize) * t.getScreenCTM().a))"
    )
    assert smallest >= 7.5  # CSS pixels, about 6 points; common practice for figures


def test_names_are_never_run(browser: _Browser, answer: Identification, tmp_path: Path) -> None:
    best = answer.hypotheses[0]
    part = replace(best.phases[0], phase=replace(best.phases[0].phase, name=EVIL))
    odd = replace(best, phases=(part, *best.phases[1:]))
    pattern = replace(answer.patterns[0], title=EVIL)
    _open(browser, replace(answer, hypotheses=(odd,), patterns=(pattern,)), tmp_path)
    assert browser.run("document.title") != "run"
    assert browser.run("document.images.length") == 0
    inside = browser.run("document.getElementById('identification').textContent")
    assert json.loads(inside)["hypotheses"][0]["phases"][0]["name"] == EVIL


def _darkness(browser: _Browser) -> float:
    """Mean darkness (0-1) of the screen along a measured ring on the image, off its marks."""
    from PIL import Image

    points = browser.run(
        "(() => {const disc = document.querySelector('.disc svg'), m = disc.getScreenCTM();"
        "window.scrollTo(0, window.scrollY + m.f); const s = disc.getScreenCTM();"
        "const ring = disc.querySelector('.hit[data-key=p1r2]'), long = ring.getTotalLength();"
        "return [0.3, 0.35, 0.65, 0.7].map(k => ring.getPointAtLength(k * long))"
        ".map(p => [p.x * s.a + s.e, p.y * s.d + s.f])})()"
    )
    screen = base64.b64decode(browser.ask("Page.captureScreenshot")["data"])
    with Image.open(io.BytesIO(screen)) as image:
        grey = image.convert("L")
        return sum(1 - grey.getpixel((round(x), round(y))) / 255 for x, y in points) / len(points)


def test_the_image_is_shown_where_its_rings_are(
    browser: _Browser,
    answer: Identification,
    tmp_path: Path,
    on_image: Callable[[Identification], Identification],
) -> None:
    browser.size(1280, 900)
    _open(browser, on_image(answer), tmp_path)
    assert _complaints(browser) == []
    assert _darkness(browser) > 0.5
    dark = [{"name": "prefers-color-scheme", "value": "dark"}]
    browser.ask("Emulation.setEmulatedMedia", features=dark)
    assert _darkness(browser) < 0.5
    browser.ask("Emulation.setEmulatedMedia", features=[])


def test_it_prints_light_on_a4(opened: _Browser) -> None:
    opened.ask(
        "Emulation.setEmulatedMedia",
        media="print",
        features=[{"name": "prefers-color-scheme", "value": "dark"}],
    )
    ground = opened.run("getComputedStyle(document.body).backgroundColor")
    opened.ask("Emulation.setEmulatedMedia", media="", features=[])
    assert ground == "rgb(255, 255, 255)"
    paper = opened.ask("Page.printToPDF", preferCSSPageSize=True)["data"]
    data = base64.b64decode(paper)
    assert data.startswith(b"%PDF")
    assert b"/MediaBox [0 0 594.95996 841.91998]" in data or b"/MediaBox [0 0 595" in data


def test_dark_follows_the_setting(opened: _Browser) -> None:
    dark = [{"name": "prefers-color-scheme", "value": "dark"}]
    opened.ask("Emulation.setEmulatedMedia", features=dark)
    ground = opened.run("getComputedStyle(document.body).backgroundColor")
    opened.ask("Emulation.setEmulatedMedia", features=[])
    assert ground == "rgb(21, 24, 28)"
