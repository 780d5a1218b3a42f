"""The page in a real browser, where one is installed: no error, no request, keyboard order, phone width, a PDF.

The browser is spoken to by its DevTools protocol over a pipe; nothing listens on a port.
"""

import json
import os
import subprocess
import sys
from contextlib import contextmanager
from itertools import count

import pytest

from analysis.command.entry import run
from analysis.report import read_results, report_of, to_html
from analysis.report.paper import chromium, options
from tests.analysis.report_cases import page_of, written_results

BROWSER = chromium()
pytestmark = [
    pytest.mark.skipif(BROWSER is None, reason="no Chromium is installed (set BRIMLINE_CHROMIUM to one)"),
    pytest.mark.skipif(sys.platform == "win32", reason="the pipe to the browser is inherited by descriptor"),
]
KINDS = ("game", "simulate", "verify")
PHONE = 360


class Devtools:
    """A browser's one page. Messages are JSON, each ended by a zero byte."""

    def __init__(self, write, read):
        self._write, self._read = write, read
        self._ids, self._left = count(1), b""
        self.events, self.session = [], None
        target = self.ask("Target.createTarget", url="about:blank")["targetId"]
        self.session = self.ask("Target.attachToTarget", targetId=target, flatten=True)["sessionId"]
        for domain in ("Page", "Network", "Runtime", "Log"):
            self.ask(f"{domain}.enable")

    def ask(self, method, **values):
        number = next(self._ids)
        message = {"id": number, "method": method, "params": values}
        if self.session is not None:
            message["sessionId"] = self.session
        os.write(self._write, json.dumps(message).encode() + b"\0")
        while True:
            answer = self._message()
            if answer.get("id") == number:
                assert "error" not in answer, answer
                return answer["result"]
            self.events.append(answer)

    def _message(self):
        while b"\0" not in self._left:
            more = os.read(self._read, 1 << 20)
            assert more, "the browser is gone"
            self._left += more
        one, _, self._left = self._left.partition(b"\0")
        return json.loads(one)

    def value(self, expression):
        found = self.ask("Runtime.evaluate", expression=expression, returnByValue=True, awaitPromise=True)
        return found["result"].get("value")

    def open(self, page):
        self.events.clear()
        self.ask("Page.navigate", url=page.as_uri())
        while not any(one.get("method") == "Page.loadEventFired" for one in self.events):
            self.events.append(self._message())
        self.value("new Promise(done => setTimeout(done, 200))")

    def told(self, *methods):
        return [one["params"] for one in self.events if one.get("method") in methods]


@contextmanager
def browsing(profile):
    """A browser with an empty profile, ended at the end."""
    to_browser, write = os.pipe()
    read, from_browser = os.pipe()

    def wire():  # the protocol's pipes are descriptors 3 and 4 of the browser
        ends = os.dup(to_browser), os.dup(from_browser)
        os.dup2(ends[0], 3)
        os.dup2(ends[1], 4)

    command = [str(BROWSER), *options(), f"--user-data-dir={profile}", "--remote-debugging-pipe"]
    started = subprocess.Popen(command, preexec_fn=wire, close_fds=False, stderr=subprocess.DEVNULL)
    os.close(to_browser), os.close(from_browser)
    try:
        yield Devtools(write, read)
    finally:
        started.terminate()
        started.wait(30)
        os.close(write), os.close(read)


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    """The folder of the results and the page's file."""
    folder = tmp_path_factory.mktemp("browser")
    results = written_results(folder, kinds=KINDS)
    page = folder / "report.html"
    page.write_text(to_html(report_of(read_results(list(results.values())))), encoding="utf-8")
    return folder, page


@pytest.fixture(scope="module")
def browser(written, tmp_path_factory):
    with browsing(tmp_path_factory.mktemp("profile")) as found:
        yield found


def complaints(browser):
    """What the browser's console was told."""
    said = browser.told("Log.entryAdded", "Runtime.exceptionThrown", "Runtime.consoleAPICalled")
    return [one for one in said if one.get("entry", {}).get("level") != "verbose"]


def requests(browser):
    urls = [one["request"]["url"] for one in browser.told("Network.requestWillBeSent")]
    return [url for url in urls if not url.startswith("data:")]


def test_no_error_and_no_request(browser, written):
    _, page = written
    browser.open(page)
    assert complaints(browser) == []
    assert requests(browser) == [page.as_uri()]


def test_a_planted_request_and_script_are_seen_and_stopped(browser, written):
    folder, page = written
    planted = '<script>window.ran = 1</script><img src="https://example.invalid/a.png"></main>'
    bad = folder / "planted.html"
    bad.write_text(page.read_text(encoding="utf-8").replace("</main>", planted), encoding="utf-8")
    browser.open(bad)
    assert len(complaints(browser)) >= 2 and browser.value("window.ran === undefined")


def test_the_keyboard_walks_the_page_in_order(browser, written):
    _, page = written
    browser.open(page)
    expected = [
        one.attributes.get("href") or one.attributes.get("aria-labelledby") or one.attributes["aria-label"]
        for one in page_of(page.read_text(encoding="utf-8")).elements
        if one.tag == "a" or one.attributes.get("tabindex") == "0"
    ]
    walked = []
    for _ in expected:
        for kind in ("keyDown", "keyUp"):
            browser.ask("Input.dispatchKeyEvent", type=kind, key="Tab", code="Tab", windowsVirtualKeyCode=9)
        walked.append(browser.value(
            "(e => e.getAttribute('href') || e.getAttribute('aria-labelledby') || e.getAttribute('aria-label'))"
            "(document.activeElement)"
        ))  # fmt: skip
    assert len(expected) > 20 and walked == expected


def test_a_phone_shows_it_without_scrolling_sideways(browser, written):
    _, page = written
    browser.ask(
        "Emulation.setDeviceMetricsOverride", width=PHONE, height=740, deviceScaleFactor=1, mobile=True
    )
    browser.open(page)
    assert browser.value("document.documentElement.scrollWidth") <= PHONE
    wide = browser.value(
        "[...document.querySelectorAll('main *')].filter(e => !e.closest('.scroll') && "
        f"e.getBoundingClientRect().right > {PHONE} + 1).map(e => e.outerHTML.slice(0, 80))"
    )
    assert wide == []
    sizes = "[...document.querySelectorAll('p, li, dd')].map(e => parseFloat(getComputedStyle(e).fontSize))"
    assert min(browser.value(sizes)) >= 14
    browser.ask("Emulation.clearDeviceMetricsOverride")


def test_the_text_that_a_browser_draws_can_be_read(browser, written):
    """Contrast of every element's computed colours, at least 4.5 (WCAG 2, from memory)."""
    _, page = written
    browser.open(page)
    assert browser.value(WORST_CONTRAST) >= 4.5
    browser.value(
        "document.querySelectorAll('main p').forEach(e => e.style.color = '#999')"
    )  # a planted fault
    assert browser.value(WORST_CONTRAST) < 4.5


WORST_CONTRAST = """
(() => {
  const part = x => { x /= 255; return x <= 0.04045 ? x / 12.92 : ((x + 0.055) / 1.055) ** 2.4 };
  const light = c => 0.2126 * part(c[0]) + 0.7152 * part(c[1]) + 0.0722 * part(c[2]);
  const read = s => s.match(/[\\d.]+/g).map(Number);
  const ground = e => { for (; e; e = e.parentElement) { const c = read(getComputedStyle(e).backgroundColor);
    if (c.length < 4 || c[3] > 0) return c } return [255, 255, 255] };
  const told = [...document.querySelectorAll('body *')].filter(e => !e.closest('svg') &&
    [...e.childNodes].some(n => n.nodeType === 3 && n.data.trim()));
  return Math.min(...told.map(e => { const a = light(read(getComputedStyle(e).color)), b = light(ground(e));
    return (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05) }));
})()
"""


def test_a_pdf_is_printed(written, tmp_path):
    folder, _ = written
    out = tmp_path / "board.html"
    assert run(["report", str(folder / "simulate"), "--pdf", "--out", str(out)]) == 0
    assert (
        out.with_suffix(".pdf").read_bytes()[:5] == b"%PDF-"
        and out.with_suffix(".pdf").stat().st_size > 20_000
    )
