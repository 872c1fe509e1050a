"""Drives headless Chromium with nothing beyond Python's standard library.

The browser is spoken to through its debugging protocol (Chrome DevTools Protocol, domains Page,
Runtime, Log, Input, Emulation) over a WebSocket (RFC 6455).
"""

import base64
import json
import os
import pathlib
import socket
import struct
import subprocess
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

    def close(self):
        self.ask("Page.close")

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
