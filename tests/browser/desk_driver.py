"""A desk process and a page on it, for tests that drive them."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path
from urllib.parse import urlparse

#: Width and height of the screen, pixels.
SIZE = (1280, 800)


class DeskProcess:
    """``starfathom desk`` as a user starts it."""

    def __init__(self, *words: str | Path) -> None:
        self.words = [str(w) for w in words]
        self.address = ""
        self.start()

    def start(self) -> None:
        command = [sys.executable, "-c", "from starfathom.cli import main; main()", "desk", *self.words, "--no-browser"]
        # a test runner in the background has Ctrl-C ignored, and its children would inherit that
        self.process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True,
                                        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL))
        lines = []
        for line in self.process.stdout:
            lines.append(line)
            if found := re.search(r"http://\S+", line):
                self.address = found.group()
                return
        raise AssertionError("the desk did not start: " + "".join(lines))

    @property
    def origin(self) -> str:
        return f"http://{urlparse(self.address).netloc}"

    def crash(self) -> None:
        os.kill(self.process.pid, signal.SIGKILL)
        self.process.communicate()

    def stop(self) -> str:
        """End it as Ctrl-C does; what it said last."""
        self.process.send_signal(signal.SIGINT)
        return self.process.communicate(timeout=20)[0]


class Page:
    """The desk as seen through Chromium."""

    def __init__(self, chromium, address: str) -> None:
        self.browser = chromium
        self.quiet()
        chromium.get(address)
        self.until("return document.documentElement.dataset.ready === '1'")
        self.until("return document.getElementById('place').textContent.includes('misfit')")

    def quiet(self) -> None:
        """Forget what was logged so far."""
        self.browser.get_log("browser")
        self.browser.get_log("performance")

    def run(self, script: str, *arguments):
        return self.browser.execute_script(script, *arguments)

    def until(self, script: str, *arguments, seconds: float = 15.0):
        """Wait until a script's answer is true; return it."""
        end = time.monotonic() + seconds
        while not (answer := self.run(script, *arguments)):
            assert time.monotonic() < end, f"waited {seconds} s in vain for: {script}; {self.text('said')!r}"
            time.sleep(0.03)
        return answer

    def text(self, id_: str) -> str:
        return self.run("return document.getElementById(arguments[0]).textContent", id_)

    def keys(self, *keys: str) -> None:
        """Press keys, one after the other, wherever the focus is."""
        from selenium.webdriver.common.action_chains import ActionChains

        for key in keys:
            ActionChains(self.browser).send_keys(key).perform()

    def press(self, key: str, id_: str = "place") -> str:
        """Press one key and wait for a text on the page to change; return the new text."""
        before = self.text(id_)
        self.keys(key)
        self.until("return document.getElementById(arguments[0]).textContent !== arguments[1]", id_, before)
        return self.text(id_)

    def picture(self, id_: str) -> str:
        """The pixels of a section's pictures, as one string."""
        return self.run("""
            const found = []
            const walk = (node) => {
              if (node instanceof HTMLCanvasElement) found.push(node.toDataURL())
              for (const child of [...(node.shadowRoot ? node.shadowRoot.children : []), ...node.children]) walk(child)
            }
            walk(document.getElementById(arguments[0]))
            return found.join("")""", id_)

    def severe(self) -> list[str]:
        """Errors on the console since the last look."""
        return [e["message"] for e in self.browser.get_log("browser") if e["level"] == "SEVERE"]

    def asked_for(self) -> set[str]:
        """Origins of every request since the last look, websockets among them."""
        found = set()
        for entry in self.browser.get_log("performance"):
            message = json.loads(entry["message"])["message"]
            url = ""
            if message["method"] == "Network.requestWillBeSent":
                url = message["params"]["request"]["url"]
            elif message["method"] == "Network.webSocketCreated":
                url = message["params"]["url"]
            parts = urlparse(url)
            if parts.scheme in ("http", "https", "ws", "wss"):
                found.add(parts.netloc)
            elif parts.scheme in ("file", "ftp"):
                found.add(parts.scheme + "://")
        return found
