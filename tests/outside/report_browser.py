#!/usr/bin/env python3
"""Opens report pages in a real, headless browser and uses them as a person would.

    report_browser.py FOLDER [--shots DIR] [--chromium PATH]

FOLDER holds pages and tables of the same result: `small.html` or `report.html`, the tables
`tracks.ecsv` and `members.ecsv`, and optionally `large.html` (5000 tracks x 60 epochs), whose
opening is timed. Needs Chromium and nothing beyond Python's standard library: the browser is
driven through its debugging protocol (Chrome DevTools Protocol, domains Page, Runtime, Input,
Emulation) over a WebSocket (RFC 6455). Without a browser the script says so and ends with 77.
"""

import argparse
import base64
import csv
import json
import os
import pathlib
import shutil
import socket
import struct
import subprocess
import sys
import tempfile
import time
import urllib.parse
import urllib.request

FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--remote-debugging-port=0", "--hide-scrollbars",
]


class Socket:
    """A WebSocket client: text messages only, as much of RFC 6455 as the browser needs."""

    def __init__(self, url):
        parts = urllib.parse.urlsplit(url)
        self.raw = socket.create_connection((parts.hostname, parts.port), timeout=120)
        key = base64.b64encode(os.urandom(16)).decode()
        self.raw.sendall((
            f"GET {parts.path} HTTP/1.1\r\nHost: {parts.netloc}\r\nUpgrade: websocket\r\n"
            f"Connection: Upgrade\r\nSec-WebSocket-Key: {key}\r\nSec-WebSocket-Version: 13\r\n\r\n"
        ).encode())
        self.held = b""
        while b"\r\n\r\n" not in self.held:
            self.held += self.raw.recv(4096)
        head, self.held = self.held.split(b"\r\n\r\n", 1)
        if b" 101 " not in head:
            raise RuntimeError(f"no WebSocket: {head!r}")

    def send(self, text):
        data = text.encode()
        mask = os.urandom(4)
        if len(data) < 126:
            head = struct.pack("!BB", 0x81, 0x80 | len(data))
        elif len(data) < 1 << 16:
            head = struct.pack("!BBH", 0x81, 0x80 | 126, len(data))
        else:
            head = struct.pack("!BBQ", 0x81, 0x80 | 127, len(data))
        self.raw.sendall(head + mask + bytes(b ^ mask[k % 4] for k, b in enumerate(data)))

    def _take(self, n):
        while len(self.held) < n:
            more = self.raw.recv(1 << 16)
            if not more:
                raise RuntimeError("the browser hung up")
            self.held += more
        out, self.held = self.held[:n], self.held[n:]
        return out

    def receive(self):
        parts = []
        while True:
            first, second = self._take(2)
            n = second & 0x7F
            if n == 126:
                n = struct.unpack("!H", self._take(2))[0]
            elif n == 127:
                n = struct.unpack("!Q", self._take(8))[0]
            data = self._take(n)
            if first & 0x0F in (0, 1, 2):
                parts.append(data)
                if first & 0x80:
                    return b"".join(parts).decode()
            elif first & 0x0F == 8:
                raise RuntimeError("the browser closed the connection")


class Tab:
    """One page of the browser."""

    def __init__(self, port):
        request = urllib.request.Request(f"http://127.0.0.1:{port}/json/new?about:blank", method="PUT")
        with urllib.request.urlopen(request) as answer:
            self.socket = Socket(json.load(answer)["webSocketDebuggerUrl"])
        self.count = 0
        self.trouble = []
        for domain in ("Page", "Runtime", "Log"):
            self.ask(domain + ".enable")

    def ask(self, method, **params):
        self.count += 1
        self.socket.send(json.dumps({"id": self.count, "method": method, "params": params}))
        while True:
            message = json.loads(self.socket.receive())
            self.note(message)
            if message.get("id") == self.count:
                if "error" in message:
                    raise RuntimeError(f"{method}: {message['error']}")
                return message["result"]

    def note(self, message):
        """Anything on the console at all counts as trouble."""
        params = message.get("params", {})
        if message.get("method") == "Runtime.exceptionThrown":
            self.trouble.append(params["exceptionDetails"].get("exception", {}).get("description", str(params)))
        elif message.get("method") == "Runtime.consoleAPICalled" and params["type"] in ("error", "warning", "assert"):
            self.trouble.append(str(params["args"]))
        elif message.get("method") == "Log.entryAdded" and params["entry"]["level"] in ("error", "warning"):
            self.trouble.append(str(params["entry"]))

    def run(self, script):
        result = self.ask("Runtime.evaluate", expression=script, awaitPromise=True, returnByValue=True)
        if "exceptionDetails" in result:
            raise RuntimeError(f"{script}: {result['exceptionDetails']}")
        return result["result"].get("value")

    def wait(self, condition, seconds=60):
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            # Between two pages there is no document to ask.
            value = self.run(f"(() => {{ try {{ return {condition}; }} catch {{ return null; }} }})()")
            if value:
                return value
            time.sleep(0.05)
        raise AssertionError(f"waited {seconds} s for: {condition}; console: {self.trouble}")

    def open(self, path, fragment=""):
        """Opens a file; the seconds until the page says it is drawn."""
        self.ask("Page.navigate", url="about:blank")
        start = time.monotonic()
        self.ask("Page.navigate", url=pathlib.Path(path).resolve().as_uri() + fragment)
        self.wait("document.documentElement.dataset.ready || ''")
        return time.monotonic() - start

    def go(self, fragment):
        self.run(f"location.hash = {json.dumps(fragment)}")
        shown = fragment.lstrip("#/").split("?")[0]
        self.wait(f"document.documentElement.dataset.shown === {json.dumps(shown)}")
        self.settle()

    def settle(self):
        self.run("new Promise(r => requestAnimationFrame(() => requestAnimationFrame(() => r(1))))")

    def size(self, width, height, scale=1, mobile=False):
        self.ask("Emulation.setDeviceMetricsOverride", width=width, height=height,
                 deviceScaleFactor=scale, mobile=mobile)

    def scheme(self, name):
        self.ask("Emulation.setEmulatedMedia", media="",
                 features=[{"name": "prefers-color-scheme", "value": name}])

    def key(self, key, code=None, text=None):
        for kind in ("keyDown", "keyUp"):
            params = {"type": kind, "key": key, "code": code or key}
            if text and kind == "keyDown":
                params["text"] = text
            if key == "Enter":
                params.update(windowsVirtualKeyCode=13)
                if kind == "keyDown":
                    params["text"] = "\r"
            self.ask("Input.dispatchKeyEvent", **params)

    def mouse(self, kind, x, y, **params):
        self.ask("Input.dispatchMouseEvent", type=kind, x=x, y=y, **params)

    def shot(self, path, whole=False):
        data = self.ask("Page.captureScreenshot", format="png", captureBeyondViewport=whole)["data"]
        pathlib.Path(path).write_bytes(base64.b64decode(data))


def start_browser(program, profile):
    process = subprocess.Popen(
        ["nice", program, *FLAGS, f"--user-data-dir={profile}", "about:blank"],
        stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    port_file = pathlib.Path(profile) / "DevToolsActivePort"
    for _ in range(600):
        if port_file.exists() and port_file.read_text().strip():
            return process, int(port_file.read_text().splitlines()[0])
        if process.poll() is not None:
            break
        time.sleep(0.1)
    process.kill()
    raise RuntimeError("the browser did not start")


def read_ecsv(path):
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


CHECKS = []


def check(function):
    CHECKS.append(function)
    return function


MAP = "document.querySelector('canvas.sky')"


@check
def map_is_drawn(tab, page, tracks, members):
    tab.open(page)
    tab.wait(f"{MAP}.dataset.t || ''")
    colours = tab.run(
        f"(() => {{ const c = {MAP}; const p = c.getContext('2d').getImageData(0, 0, c.width, c.height).data;"
        " const s = new Set(); for (let k = 0; k < p.length; k += 4) s.add(p[k] * 65536 + p[k+1] * 256 + p[k+2]);"
        " return s.size; })()")
    assert colours > 20, f"the map shows {colours} colours only"
    summary = tab.run("document.getElementById('tabs').textContent").replace("\u202f", "")
    assert f"Tracks{len(tracks)}" in summary, summary


@check
def slider_moves_time(tab, page, tracks, members):
    tab.open(page)
    tab.wait(f"{MAP}.dataset.t || ''")
    before = tab.run(f"{MAP}.toDataURL()")
    tab.run("(() => { const s = document.getElementById('when'); s.value = s.max; s.dispatchEvent(new Event('input')); })()")
    tab.settle()
    t, most = float(tab.run(f"{MAP}.dataset.t")), float(tab.run("document.getElementById('when').max"))
    assert abs(t - most) < 1e-3, f"the map stands at {t}, the slider at {most}"
    last = max(members, key=lambda m: float(m["time_yr"]))
    assert last["epoch_name"] in tab.run("document.querySelector('.time output').textContent")
    assert tab.run(f"{MAP}.toDataURL()") != before, "the picture does not change with time"


@check
def play_runs_and_pauses(tab, page, tracks, members):
    tab.open(page)
    tab.wait(f"{MAP}.dataset.t || ''")
    start = float(tab.run(f"{MAP}.dataset.t"))
    tab.run("document.getElementById('play').click()")
    tab.wait(f"Math.abs({MAP}.dataset.t - {start}) > 0.2")
    tab.run("document.getElementById('play').click()")
    tab.settle()
    at = tab.run(f"{MAP}.dataset.t")
    time.sleep(0.3)
    assert tab.run(f"{MAP}.dataset.t") == at, "time runs on after the pause"


@check
def search_finds_a_track(tab, page, tracks, members):
    tab.open(page)
    wanted = tracks[len(tracks) // 2]["track"]
    tab.run("document.getElementById('search').focus()")
    tab.ask("Input.insertText", text=wanted)
    tab.key("Enter")
    tab.wait(f"Number({MAP}.dataset.selected) >= 0")
    assert wanted in tab.run("document.getElementById('chosen').textContent")
    tab.go("#/epochs")
    tab.run("(() => { const s = document.getElementById('search'); s.value = ''; s.focus(); })()")
    tab.ask("Input.insertText", text=wanted)
    tab.key("Enter")
    tab.wait(f"document.querySelector('h1').textContent === {json.dumps(wanted)}")


@check
def click_and_wheel_work(tab, page, tracks, members):
    tab.open(page)
    tab.wait(f"{MAP}.dataset.t || ''")
    tab.run(f"{MAP}.focus()")
    tab.key("n", "KeyN", "n")
    tab.wait(f"Number({MAP}.dataset.selected) >= 0")
    scale = float(tab.run(f"{MAP}.dataset.scale"))
    box = tab.run(f"(() => {{ const r = {MAP}.getBoundingClientRect(); return [r.left + r.width / 2, r.top + r.height / 2]; }})()")
    tab.mouse("mouseWheel", *box, deltaX=0, deltaY=-400)
    tab.wait(f"{MAP}.dataset.scale > {scale * 1.2}")
    tab.key("Escape")
    tab.wait(f"Number({MAP}.dataset.selected) === -1")
    tab.run("Array.from(document.querySelectorAll('.side button')).find(b => b.textContent === 'Whole field').click()")
    tab.wait(f"{MAP}.dataset.scale < {scale * 1.1}")
    # A sweep over the map must sooner or later find a star, and a click select it.
    for k in range(400):
        x = box[0] - 150 + (k % 20) * 15
        y = box[1] - 150 + (k // 20) * 15
        tab.mouse("mouseMoved", x, y)
        if tab.run("!document.querySelector('.tip').hidden && document.querySelector('.tip').textContent.includes('probability')"):
            tab.mouse("mousePressed", x, y, button="left", clickCount=1)
            tab.mouse("mouseReleased", x, y, button="left", clickCount=1)
            tab.wait(f"Number({MAP}.dataset.selected) >= 0")
            return
    raise AssertionError("no star found under the mouse")


@check
def keyboard_opens_a_track(tab, page, tracks, members):
    tab.open(page)
    tab.wait(f"{MAP}.dataset.t || ''")
    tab.run(f"{MAP}.focus()")
    tab.key("n", "KeyN", "n")
    tab.key("Enter")
    tab.wait("location.hash.startsWith('#/track/')")
    names = [t["track"] for t in tracks]
    assert tab.run("document.querySelector('h1').textContent") in names


def close(text, value, what):
    """A number on the page is the number of the table, rounded to the digits shown."""
    shown = text.replace("\u202f", "").strip()
    decimals = len(shown.split(".")[1]) if "." in shown else 0
    assert abs(float(shown) - float(value)) <= 0.51 * 10 ** -decimals + 1e-9, f"{what}: page {shown}, table {value}"


@check
def track_numbers_equal_the_tables(tab, page, tracks, members):
    tab.open(page)
    by_track = {}
    for m in members:
        by_track.setdefault(m["track"], []).append(m)
    for track in tracks[:: max(1, len(tracks) // 12)] + tracks[:4]:
        name = track["track"]
        tab.run("location.hash = '#/track/' + encodeURIComponent(" + json.dumps(name) + ")")
        tab.wait(f"(document.querySelector('h1') || {{}}).textContent === {json.dumps(name)}")
        numbers = tab.run("Object.fromEntries(Array.from(document.querySelectorAll('[data-value]'), e => [e.dataset.value, e.textContent]))")
        for label, column in [("x", "x_mas"), ("y", "y_mas"), ("vx", "vx_mas_yr"), ("vy", "vy_mas_yr")]:
            value, error = numbers[label].split("±")
            close(value, track[column], f"{name} {column}")
            close(error, track[column.replace("_mas", "_err_mas")], f"{name} error of {column}")
        for label in ("n_members", "probability", "chi2"):
            close(numbers[label], track[label], f"{name} {label}")
        rows = tab.run("Array.from(document.querySelectorAll('main [aria-label=\"Detections of the track\"] tbody tr'), r => Array.from(r.cells, c => c.textContent))")
        own = sorted(by_track[name], key=lambda m: float(m["time_yr"]))
        assert len(rows) == len(own), f"{name}: {len(rows)} rows, table {len(own)}"
        for row, m in zip(rows, own):
            assert (row[0], row[1]) == (m["epoch_name"], m["id"]), (row, m)
            for k, column in enumerate(["time_yr", "x_mas", "y_mas", "x_err_mas", "y_err_mas", "dx_mas", "dy_mas"], 2):
                close(row[k], m[column], f"{name} {m['epoch_name']} {column}")
            close(row[10], m["probability"], f"{name} probability")
            close(row[11], m["share"], f"{name} share")


@check
def every_page_opens(tab, page, tracks, members):
    tab.open(page)
    for tabname in tab.run("Array.from(document.querySelectorAll('#tabs a'), a => a.getAttribute('href'))"):
        tab.go(tabname)
        assert tab.run("document.querySelector('main').textContent.length") > 20, tabname
        link = tab.run("(() => { const a = document.querySelector('main td a[href^=\"#/\"]'); return a ? a.getAttribute('href') : ''; })()")
        if link:
            tab.run(f"location.hash = {json.dumps(link)}")
            tab.wait("document.querySelector('main h1') !== null")
            heading = tab.run("document.querySelector('main h1').textContent")
            assert heading != "Not on this page", link
    tab.go("#/track/no-such-track")
    assert tab.run("document.querySelector('h1').textContent") == "Not on this page"


@check
def nothing_spills_at_phone_width(tab, page, tracks, members):
    tab.size(390, 844, 2, True)
    tab.open(page)
    for where in ("field", "tracks", "track/" + urllib.parse.quote(tracks[0]["track"]), "tangles", "epochs", "epoch/0", "counts"):
        tab.go("#/" + where)
        width = tab.run("Math.max(document.documentElement.scrollWidth, document.querySelector('main').scrollWidth)")
        assert width <= 391, f"{where} is {width} px wide on a phone"
    tab.size(1360, 860)


def shots(tab, page, folder, tracks, tangle):
    folder = pathlib.Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    first = "track/" + urllib.parse.quote(tracks[0]["track"])
    orbit = next((t["track"] for t in tracks if t["model"] == "keplerian"), tracks[1]["track"])
    places = {"field": "field", "tracks": "tracks", "track": first, "orbit": "track/" + orbit,
              "tangles": "tangles", "tangle": f"tangle/{tangle}", "epochs": "epochs", "epoch": "epoch/3",
              "counts": "counts", "audit": "audit", "recovery": "recovery"}
    for look, width, height, scale, scheme in [("light", 1360, 860, 1, "light"), ("dark", 1360, 860, 1, "dark"), ("phone", 390, 844, 2, "light")]:
        tab.size(width, height, scale, look == "phone")
        tab.scheme(scheme)
        tab.open(page)
        for name, where in places.items():
            if name in ("audit", "recovery") and not tab.run(f"document.querySelector('#tabs a[data-tab={name}]') !== null"):
                continue
            tab.go("#/" + where)
            if name == "field":
                tab.wait(f"{MAP}.dataset.t || ''")
                tab.shot(folder / f"{look}-field.png")
                tab.go("#/tracks")
                tab.go("#/field?at=" + urllib.parse.quote(tracks[2]["track"]))
                tab.wait(f"Number({MAP}.dataset.selected) >= 0")
                tab.settle()
                tab.shot(folder / f"{look}-closer.png")
                continue
            # The whole page, not only what fits the window.
            tall = tab.run("document.querySelector('main').scrollHeight + 80")
            tab.size(width, min(3000, max(height, tall)), scale, look == "phone")
            tab.settle()
            tab.shot(folder / f"{look}-{name}.png")
            tab.size(width, height, scale, look == "phone")
    tab.size(1360, 860)
    tab.scheme("light")


def time_large(tab, page):
    seconds = min(tab.open(page) for _ in range(3))
    inside = tab.run("document.documentElement.dataset.ready")
    frames = tab.run(
        "new Promise(done => { const s = document.getElementById('when'); let n = 0; const t0 = performance.now();"
        " const step = () => { s.value = Number(s.min) + (s.max - s.min) * (n % 50) / 50; s.dispatchEvent(new Event('input'));"
        " if (++n > 40) done((performance.now() - t0) / 40); else requestAnimationFrame(step); }; step(); })")
    size = pathlib.Path(page).stat().st_size / 1e6
    print(f"large page: {size:.2f} MB, open in {seconds:.2f} s ({inside} ms by the page's own clock), {frames:.0f} ms a frame")
    assert size < 15, "larger than 15 MB"
    return seconds


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=pathlib.Path)
    parser.add_argument("--shots")
    parser.add_argument("--chromium", default=os.environ.get("CHROMIUM"))
    options = parser.parse_args()
    program = options.chromium or shutil.which("chromium") or shutil.which("google-chrome")
    if not program:
        print("no browser found: nothing was checked")
        return 77
    page = next(p for p in (options.folder / "small.html", options.folder / "report.html") if p.exists())
    tracks = read_ecsv(options.folder / "tracks.ecsv")
    members = read_ecsv(options.folder / "members.ecsv")
    failed = 0
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        process, port = start_browser(program, profile)
        try:
            tab = Tab(port)
            tab.size(1360, 860)
            for function in CHECKS:
                tab.trouble.clear()
                try:
                    function(tab, page, tracks, members)
                    assert not tab.trouble, f"on the console: {tab.trouble}"
                    print(f"ok      {function.__name__.replace('_', ' ')}")
                except (AssertionError, RuntimeError, KeyError) as trouble:
                    failed += 1
                    print(f"FAILED  {function.__name__.replace('_', ' ')}: {trouble} {tab.trouble}")
            if options.shots:
                small = [t for t in read_ecsv(options.folder / "tangles.ecsv") if 2 <= int(t["n_tracks"]) <= 4]
                shots(tab, page, options.shots, tracks, small[0]["tangle"] if small else 0)
            if (options.folder / "large.html").exists():
                time_large(tab, options.folder / "large.html")
        finally:
            process.terminate()
            process.wait()
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
