"""The frame in a browser: how smoothly it moves, how soon it answers, what it costs to open and to keep open.

Chromium without a screen and without a graphics processor draws the demo from a server in a process of its own. Times are the
page's own. A machine does other things too: of several rounds the best counts, and each figure says how many there were.
"""

from __future__ import annotations

import atexit
import contextlib
import itertools
import math
import random
import re
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from functools import cache
from pathlib import Path
from typing import Any

from playwright.sync_api import Browser, CDPSession, Page, sync_playwright
from run import Figure, figure
from unwatched import Unwatched

CHROMIUM = "/usr/bin/chromium"
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
SCREEN = {"width": 1920, "height": 1080}
ROUNDS = 5
MOVES = 1000
WHEEL_RATE = 0.0022  # natural logarithm of the zoom for a pixel of the wheel: gestures.js
HERE = "#u=16.2&v=15.4&width=12"

# The page notes the time of every frame from now on.
WATCH = """() => {
  window.frames_seen = [];
  const note = (now) => { window.frames_seen.push(now); requestAnimationFrame(note); };
  requestAnimationFrame(note);
}"""

# Turns the wheel so long, ms, that the view gets so many levels (factors of two) closer, by an even share before each
# frame; what the frame has held back of it, because frames came late, follows at the end.
WHEEL = """([levels, long, rate, clientX, clientY]) => new Promise((done) => {
  const hand = document.querySelector('#hand');
  const width = () => Math.log2(Number(document.querySelector('#scale .handle').getAttribute('aria-valuenow')));
  const [begin, first] = [performance.now(), width()];
  let sent = 0;
  const turn = () => {
    const part = Math.min((performance.now() - begin) / long, 1);
    const late = part === 1 && Math.abs(first - width() - levels) > 0.3;
    const deltaY = late ? -20 * Math.sign(levels) : -levels * part * Math.LN2 / rate - sent;
    sent += deltaY;
    hand.dispatchEvent(new WheelEvent('wheel', { deltaY, clientX, clientY, bubbles: true, cancelable: true }));
    if (part < 1 || (late && performance.now() < begin + 2 * long)) requestAnimationFrame(turn);
    else done();
  };
  turn();
})"""


@cache
def stack() -> contextlib.ExitStack:
    """What has to be put away when the bench ends."""
    ends = contextlib.ExitStack()
    atexit.register(ends.close)
    return ends


@cache
def served() -> str:
    """The demo, served; its address."""
    root = Path(__file__).parents[2]
    atlas = root / "marram" / "marram.atlas"
    if not atlas.exists():
        folder = Path(stack().enter_context(tempfile.TemporaryDirectory(prefix="tilemap-bench-")))
        make = [sys.executable, "-m", "tilemap", "demo", str(folder), "--no-serve"]
        subprocess.run(make, check=True, stdout=subprocess.DEVNULL)
        atlas = folder / "marram.atlas"
    command = [sys.executable, "-m", "tilemap", "serve", str(atlas), "--port", "0"]
    server = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)
    stack().callback(server.wait)
    stack().callback(server.terminate)
    assert server.stdout is not None
    for line in server.stdout:
        found = re.search(r"http://\S+", line)
        if found:
            return f"{found[0].rstrip('/')}/marram/"
    raise RuntimeError("the server did not say where it is")


@cache
def browser() -> Browser:
    playwright = stack().enter_context(sync_playwright())
    started = playwright.chromium.launch(executable_path=CHROMIUM, headless=True, args=FLAGS)
    stack().callback(started.close)
    return started


@contextlib.contextmanager
def page(fragment: str = "", slow: bool = False) -> Iterator[tuple[Page, CDPSession, dict[str, list[float]]]]:
    """A browser that has seen nothing yet, with the frame open and at rest; and the bytes that came, by kind."""
    context = browser().new_context(viewport=SCREEN)
    try:
        sheet = context.new_page()
        tools = context.new_cdp_session(sheet)
        kinds: dict[str, str] = {}
        came: dict[str, list[float]] = {}
        tools.send("Network.enable")
        tools.on("Network.responseReceived", lambda e: kinds.__setitem__(e["requestId"], e["type"]))
        tools.on(
            "Network.loadingFinished",
            lambda e: came.setdefault(kinds.get(e["requestId"], "?"), []).append(e["encodedDataLength"]),
        )
        if slow:
            bits = 20e6
            link = {"offline": False, "latency": 80, "downloadThroughput": bits / 8, "uploadThroughput": bits / 8}
            tools.send("Network.emulateNetworkConditions", link)
        sheet.goto(served() + fragment)
        until(sheet, "performance.getEntriesByName('first-view').length")
        yield sheet, tools, came
    finally:
        context.close()


def waiting(so: str) -> str:
    """A script that waits until something is so; in the page itself, whose policy lets no text be run as a script."""
    return f"new Promise((done) => {{ const look = () => ({so}) ? done() : setTimeout(look, 20); look(); }})"


def until(sheet: Page, so: str) -> None:
    sheet.evaluate(f"() => {waiting(so)}")


def rest(sheet: Page) -> None:
    until(sheet, "document.querySelector('#hand').getAttribute('aria-busy') === 'false'")


def width_in_view(sheet: Page) -> float:
    return float(sheet.locator("#scale .handle").first.get_attribute("aria-valuenow") or 0)


def journey(sheet: Page) -> list[float]:
    """Ten seconds of travel by mouse and wheel: frame times in ms."""
    mouse = sheet.mouse
    x, y = SCREEN["width"] / 2, SCREEN["height"] / 2
    start = time.perf_counter()

    def go_on(end: float, step: Any) -> None:
        """Hand movements, sixty a second, up to a time."""
        while (now := time.perf_counter() - start) < end:
            step(now)
            time.sleep(max(0.0, 1 / 60 - (time.perf_counter() - start - now)))

    def zoom(way: int, end: float) -> None:
        """Eight levels, a factor of 256, by the wheel, evenly until `end`."""
        left = end - (time.perf_counter() - start)
        sheet.evaluate(WHEEL, [way * 8, 1000 * left, WHEEL_RATE, x + 120, y - 60])

    widths = [width_in_view(sheet)]
    sheet.evaluate(WATCH)
    mouse.move(x, y)
    mouse.down()
    go_on(2.0, lambda t: mouse.move(x + 260 * math.sin(3 * t), y + 180 * math.sin(2.1 * t)))
    mouse.up()
    for turn in (1, -1):  # two flings
        mouse.move(x - 300 * turn, y)
        mouse.down()
        for k in range(8):
            mouse.move(x + turn * (75 * k - 300), y + 20 * k)
            time.sleep(1 / 60)
        mouse.up()
        go_on(3.0 if turn == 1 else 4.0, lambda _: None)
    mouse.move(x + 120, y - 60)
    zoom(1, 6.5)
    widths.append(width_in_view(sheet))
    mouse.down()
    go_on(7.5, lambda t: mouse.move(x + 120 + 200 * math.sin(4 * (t - 6.5)), y - 60))
    mouse.up()
    zoom(-1, 10.0)
    levels = math.log2(widths[0] / widths[1])
    assert levels > 7.5, f"the journey went over {levels:.1f} levels"
    times = sheet.evaluate("window.frames_seen")
    return [b - a for a, b in itertools.pairwise(times)]


def worked(tools: CDPSession) -> float:
    """Processor time that the page's own thread has taken, s: other programs on the machine do not lengthen it."""
    return {each["name"]: each["value"] for each in tools.send("Performance.getMetrics")["metrics"]}["TaskDuration"]


@cache
def journeys() -> list[tuple[float, float, int, float]]:
    """Of each round: median and 95th percentile of frame times, ms; number of frames; work of the page's thread a frame, ms."""
    found = []
    for _ in range(ROUNDS):
        with page("#u=15&v=15&width=30") as (sheet, tools, _came):
            rest(sheet)
            tools.send("Performance.enable", {"timeDomain": "threadTicks"})
            before = worked(tools)
            times = sorted(journey(sheet))
            work = 1000 * (worked(tools) - before) / len(times)
        found.append((statistics.median(times), times[int(0.95 * (len(times) - 1))], len(times), round(work, 1)))
    return found


def median() -> Iterator[Figure]:
    best = min(journeys())
    yield figure(
        "frame/median_ms",
        best[0],
        "ms",
        f"17 ms; best of {ROUNDS} journeys of ten seconds",
        frames=best[2],
        work_ms=best[3],
    )


def slowest() -> Iterator[Figure]:
    best = min(journeys(), key=lambda each: each[1])
    yield figure(
        "frame/p95_ms",
        best[1],
        "ms",
        f"34 ms; best of {ROUNDS} journeys of ten seconds",
        frames=best[2],
        work_ms=best[3],
    )


def colours(fragment: str) -> list[float]:
    """How long the map takes to take over other colours, from the press of a key to the last tile of the view, ms."""
    with page(fragment) as (sheet, _tools, _came):
        rest(sheet)
        for _ in range(4 * ROUNDS):
            sheet.keyboard.press("r")
            sheet.wait_for_timeout(400)
            rest(sheet)
        return sheet.evaluate("performance.getEntriesByName('recolour').map((each) => each.duration)")


def recolour() -> Iterator[Figure]:
    times = sorted(colours(HERE))
    compared = f"50 ms; best of {len(times)} changes"
    yield figure("frame/recolour_ms", times[0], "ms", compared, median=statistics.median(times))


def blend() -> Iterator[Figure]:
    times = sorted(colours(f"{HERE}&sheet=gas&hue=temperature"))
    compared = f"100 ms; best of {len(times)} changes, brightness from one sheet and hue from another"
    yield figure("frame/blend_ms", times[0], "ms", compared, median=statistics.median(times))


# What has come, in bytes as sent, in the page or in one of its workers, where tiles are fetched.
CAME = "performance.getEntriesByType('resource').reduce((sum, { transferSize }) => sum + transferSize, 0)"


def first_views(slow: bool, rounds: int = ROUNDS) -> list[tuple[float, float, float]]:
    """Seconds to the first complete view, megabytes until then, and kilobytes of scripts and styles."""
    found = []
    for _ in range(rounds):
        with page(slow=slow) as (sheet, _tools, came):
            seconds = sheet.evaluate("performance.getEntriesByName('first-view')[0].startTime") / 1000
            tiles = sum(worker.evaluate(CAME) for worker in sheet.workers)
            code = sum(sum(came.get(kind, [])) for kind in ("Script", "Stylesheet"))
            found.append((seconds, (sheet.evaluate(CAME) + sum(came["Document"]) + tiles) / 1e6, code / 1e3))
    return found


@cache
def local_views() -> list[tuple[float, float, float]]:
    return first_views(slow=False)


def first_view() -> Iterator[Figure]:
    yield figure("frame/first_view_s", min(local_views())[0], "s", f"1.0 s; best of {ROUNDS}, from a local server")


def first_view_slow() -> Iterator[Figure]:
    seconds = min(first_views(slow=True))[0]
    yield figure("frame/first_view_slow_s", seconds, "s", f"2.5 s; best of {ROUNDS}, at 20 Mbit/s and 80 ms of delay")


def first_view_size() -> Iterator[Figure]:
    most = max(size for _, size, _ in local_views())
    yield figure("frame/first_view_mb", most, "MB", "1.5 MB; all that came before the first view was complete, as sent")


def code() -> Iterator[Figure]:
    static = Path(__file__).parents[2] / "static"
    files = [file for kind in ("*.js", "*.css") for file in static.glob(kind)]
    raw = sum(file.stat().st_size for file in files)
    most = max(size for _, _, size in local_views())
    yield figure("frame/code_kb", most, "kB", "150 kB; scripts and styles as sent", unpacked_kb=round(raw / 1e3, 1))


def process_mb(pid: int) -> float:
    """Memory that a process alone takes: its proportional set size."""
    text = Path(f"/proc/{pid}/smaps_rollup").read_text()
    return int(re.search(r"^Pss:\s+(\d+)", text, re.M)[1]) * 1024 / 1e6  # type: ignore[index]


def wander(sheet: Unwatched, dice: random.Random) -> None:
    """A random move: the wheel, a drag, a link; another sheet, tone or depth now and then."""
    x, y = dice.randint(500, 1500), dice.randint(300, 800)
    kind = dice.random()
    if kind < 0.4:
        sheet.mouse("mouseWheel", x, y, deltaX=0, deltaY=dice.uniform(-900, 900))
    elif kind < 0.7:
        sheet.mouse("mousePressed", x, y, button="left", buttons=1)
        for _ in range(3):
            sheet.mouse("mouseMoved", dice.randint(500, 1500), dice.randint(300, 800), button="left", buttons=1)
        sheet.mouse("mouseReleased", x, y, button="left")
    elif kind < 0.85:
        width = 30 * 2 ** -dice.uniform(0, 6)
        u, v = dice.uniform(2, 28), dice.uniform(2, 28)
        sheet.run(f"location.hash = '#u={u:.3f}&v={v:.3f}&width={width:.4g}'")
    else:
        sheet.press(dice.choice("1234rl" if kind < 0.95 else "[]{}\\"))
    time.sleep(0.06)


def heap() -> Iterator[Figure]:
    dice = random.Random(5)
    sheet = Unwatched(CHROMIUM, FLAGS, SCREEN["width"], SCREEN["height"])
    try:
        sheet.go(served() + HERE)
        sizes = []
        for move in range(1, MOVES + 1):
            wander(sheet, dice)
            if move % (MOVES // 10) == 0:
                sheet.run(waiting("document.querySelector('#hand').getAttribute('aria-busy') === 'false'"))
                sheet.send("HeapProfiler.collectGarbage")
                time.sleep(0.3)
                sizes.append(max(map(process_mb, sheet.pages())))
    finally:
        sheet.close()
    early, late = statistics.mean(sizes[1:4]), statistics.mean(sizes[-3:])
    yield figure(
        "frame/heap_growth",
        late / early,
        "ratio",
        f"1.0, level: memory of the page's process after {MOVES} random moves over that after {MOVES * 3 // 10}",
        megabytes=[round(size) for size in sizes],
    )
