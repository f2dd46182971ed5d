from __future__ import annotations

import http.client
import socket
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from urllib.parse import parse_qs, urlparse

import pytest
from playwright.sync_api import Browser, Page, sync_playwright

from monitor.page.launch import command
from tests import page_made

pytestmark = pytest.mark.browser

END = "2026-04-14T12:20Z"
VIEWS = ("", "trend", "balance", "alerts")
QUIET = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
    "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1, EXCLUDE localhost",
]  # fmt: skip
# Streamlit's own start page holds one inline line that the policy stops, and asks for two files that a
# direct load of a view does not have; all three are harmless.
KNOWN = ("Executing inline script violates", "404 (Not Found)")


def free_port() -> int:
    with closing(socket.socket()) as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def serving(store: Path) -> Iterator[int]:
    """The page as `outlet page` serves it, ended by its own process id."""
    port = free_port()
    log = subprocess.PIPE
    process = subprocess.Popen(command(store, [page_made.DEMO], port), stdout=log, stderr=subprocess.STDOUT)
    try:
        until = time.monotonic() + 40
        while not _healthy(port):
            assert process.poll() is None, "the server ended by itself"
            assert time.monotonic() < until, "the server does not answer"
            time.sleep(0.2)
        yield port
    finally:
        process.terminate()
        process.communicate(timeout=20)


def _healthy(port: int) -> bool:
    try:
        return ask(port, "/_stcore/health").status == 200
    except OSError:
        return False


def ask(port: int, path: str, **headers: str) -> http.client.HTTPResponse:
    with closing(http.client.HTTPConnection("127.0.0.1", port, timeout=5)) as line:
        line.request("GET", path, headers=headers)
        answer = line.getresponse()
        answer.read()
        return answer


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("browser") / "store"
    page_made.fill(folder, page_made.unit(), days=40, end=END, off=[(150, 118)], drop=2.4)
    return folder


@pytest.fixture(scope="module")
def port(store: Path) -> Iterator[int]:
    with serving(store) as number:
        yield number


@pytest.fixture(scope="module")
def browser(chromium: str) -> Iterator[Browser]:
    with sync_playwright() as play:
        opened = play.chromium.launch(executable_path=chromium, args=QUIET)
        yield opened
        opened.close()


Opened = Callable[..., Page]


@pytest.fixture
def opened(browser: Browser, port: int) -> Iterator[Opened]:
    """Open a view and wait until it is drawn; what the console said is on `page.said`."""
    contexts = []

    def make(path: str, *, wide: bool = True, scheme: str = "light", zone: str = "America/New_York") -> Page:
        size = {"width": 1920, "height": 1080} if wide else {"width": 390, "height": 844}
        context = browser.new_context(
            viewport=size, color_scheme=scheme, timezone_id=zone, is_mobile=not wide
        )
        contexts.append(context)
        page = context.new_page()
        page.said = []
        page.asked = []
        page.on("console", lambda m: page.said.append(m.text) if m.type == "error" else None)
        page.on("pageerror", lambda fault: page.said.append(str(fault)))
        page.on("request", lambda request: page.asked.append(request.url))
        page.goto(f"http://127.0.0.1:{port}/{path}")
        page.wait_for_selector(".foot", timeout=30_000)
        page.wait_for_selector("canvas", timeout=30_000)
        page.wait_for_timeout(1500)
        return page

    yield make
    for context in contexts:
        context.close()


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("wide", [True, False], ids=["1920", "390"])
@pytest.mark.parametrize("path", VIEWS, ids=["now", "trend", "balance", "alerts"])
def test_a_view_is_drawn_without_fault_and_fits_the_screen(
    opened: Opened, path: str, wide: bool, scheme: str
):
    page = opened(path, wide=wide, scheme=scheme)
    assert [line for line in page.said if not line.startswith(KNOWN[0]) and KNOWN[1] not in line] == []
    assert page.get_by_text("has a fault of its own").count() == 0
    over = page.evaluate(
        "(e => e.scrollWidth - e.clientWidth)(document.querySelector('[data-testid=stMain]'))"
    )
    assert over <= 0
    for index in range(page.locator(".stVegaLiteChart canvas").count()):
        assert _painted(page, index), f"chart {index} is blank"


def _painted(page: Page, index: int) -> bool:
    """Whether a canvas holds more than one colour."""
    return bool(
        page.locator(".stVegaLiteChart canvas")
        .nth(index)
        .evaluate(
            "c => { const image = c.getContext('2d').getImageData(0, 0, c.width, c.height);"
            " return new Set(new Uint32Array(image.data.buffer)).size > 3; }"
        )
    )


def test_nothing_is_asked_of_another_host(opened: Opened, port: int):
    for path in VIEWS:
        page = opened(path)
        hosts = {urlparse(url).netloc for url in page.asked if not url.startswith(("data:", "blob:"))}
        assert hosts == {f"127.0.0.1:{port}"}


def test_axis_labels_are_plant_time_whatever_the_browsers_zone(opened: Opened):
    # The same pixels in New York, in Tokyo, and where a zone has half hours.
    pictures = {
        opened("trend", zone=zone).locator("canvas").first.evaluate("c => c.toDataURL()")
        for zone in ("America/New_York", "Asia/Tokyo", "Asia/Kolkata")
    }
    assert len(pictures) == 1


def test_drawing_across_a_chart_narrows_the_span_and_a_reload_keeps_it(opened: Opened):
    page = opened("trend")
    box = page.locator(".stVegaLiteChart canvas").first.bounding_box()
    assert box is not None
    across, height = [box["x"] + box["width"] * part for part in (0.80, 0.85, 0.95)], box["y"] + 100
    page.mouse.move(across[0], height)
    page.mouse.down()
    for place in across[1:]:
        page.mouse.move(place, height, steps=6)
    page.mouse.up()
    page.get_by_label("From (plant time)").first.wait_for(timeout=15_000)
    page.wait_for_timeout(1500)
    asked = parse_qs(urlparse(page.url).query)
    assert {"span", "from", "to"} <= set(asked)
    assert asked["from"] < asked["to"]
    page.reload()
    page.get_by_label("From (plant time)").first.wait_for(timeout=15_000)
    page.wait_for_timeout(1000)
    assert parse_qs(urlparse(page.url).query) == asked


def test_a_span_is_chosen_by_keyboard_alone(opened: Opened):
    page = opened("trend")
    page.get_by_role("radio", name="30 d").focus()
    page.keyboard.press("Space")
    page.wait_for_timeout(2000)
    assert parse_qs(urlparse(page.url).query)["span"] == ["30 d"]


def test_links_keep_the_unit_and_the_span(opened: Opened):
    page = opened("trend?span=3+d")
    for view in ("Now", "Balance", "Trend"):
        page.get_by_role("link", name=view).click()
        page.wait_for_timeout(2500)
        asked = parse_qs(urlparse(page.url).query)
        assert asked["unit"] == ["demo"]
        assert view == "Now" or asked["span"] == ["3 d"]


def test_a_key_figure_opens_to_how_it_was_worked_out(opened: Opened):
    page = opened("")
    page.get_by_role("button", name="Yield of methacrolein on isobutene fed", exact=True).click()
    page.get_by_text("Watched: 8 h, steady, at least 81.0 %").wait_for(timeout=10_000)


def test_the_answer_carries_the_security_headers(port: int):
    answer = ask(port, "/")
    policy = answer.headers["content-security-policy"]
    for part in ("default-src 'self'", "script-src 'self';", "frame-ancestors 'none'", "object-src 'none'"):
        assert part in policy
    assert answer.headers["x-content-type-options"] == "nosniff"
    assert answer.headers["referrer-policy"] == "no-referrer"


def test_a_foreign_host_name_or_origin_is_refused(port: int):
    assert ask(port, "/", Host=f"rebound.example:{port}").status == 403
    socket_headers = {
        "Upgrade": "websocket", "Connection": "Upgrade", "Sec-WebSocket-Version": "13",
        "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==",
    }  # fmt: skip
    for wrong in ({"Host": f"rebound.example:{port}"}, {"Origin": "http://elsewhere.example"}):
        assert ask(port, "/_stcore/stream", **socket_headers, **wrong).status == 403


def test_the_port_is_open_on_this_machine_only(port: int):
    # proc(5): local address in hexadecimal, least byte first; state 0A is listening.
    table = Path("/proc/net/tcp")
    if not table.exists():
        pytest.skip("needs Linux's list of sockets")
    rows = [line.split() for line in table.read_text(encoding="ascii").splitlines()[1:]]
    assert {
        row[1].split(":")[0] for row in rows if row[3] == "0A" and int(row[1].split(":")[1], 16) == port
    } == {"0100007F"}


@pytest.mark.slow
def test_a_pass_shows_at_the_next_refresh_without_a_reload(browser: Browser, tmp_path: Path):
    with serving(tmp_path / "store") as port:
        page = browser.new_page()
        page.goto(f"http://127.0.0.1:{port}/")
        page.get_by_text("Nothing has been taken in yet").wait_for(timeout=30_000)
        page_made.fill(tmp_path / "store", page_made.unit(), days=3, end=END, off=[], drop=0)
        page.get_by_text("No limit of 4 watches is crossed").wait_for(timeout=60_000)
        page.close()
