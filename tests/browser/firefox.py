"""A site in Firefox, from disk: ``python -m tests.browser.firefox SITE`` opens every kind of page.

Not a test that runs by itself, because the machines that test have Chromium alone. It speaks the W3C protocol
WebDriver BiDi (draft, sections 'session', 'browsingContext', 'script', 'log', 'network'), which Firefox
answers without a driver, over the connection that selenium brings along. For each page: how many figures came
to life, how wide the page is, what the console said, and every address asked for outside the site.
"""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

from websocket import create_connection

from tests.browser.chromium import address, outside

PORT = 9377
EVENTS = ["log.entryAdded", "network.beforeRequestSent"]

LIVE = """
(async () => {
  const figures = [...document.querySelectorAll("figure[data-figure]")];
  for (const figure of figures) {
    figure.scrollIntoView();
    const end = Date.now() + 20000;
    while (figure.dataset.state !== "live" && Date.now() < end)
      await new Promise((then) => setTimeout(then, 50));
  }
  const live = figures.filter((f) => f.dataset.state === "live" && f.querySelector(".live svg"));
  return JSON.stringify([figures.length, live.length, document.documentElement.scrollWidth, innerWidth]);
})()
"""


class Firefox:
    """A running Firefox and the one connection to it."""

    def __init__(self, profile: Path) -> None:
        program = shutil.which("firefox-esr") or shutil.which("firefox")
        if program is None:
            raise SystemExit("there is no Firefox: on Debian, apt-get install firefox-esr")
        port = f"--remote-debugging-port={PORT}"
        command = [program, "--headless", "--no-remote", "--profile", str(profile), port, "about:blank"]
        quiet = subprocess.DEVNULL
        self.process = subprocess.Popen(command, stdout=quiet, stderr=quiet)
        self.socket = self._connected()
        self.number = 0
        self.events: list[dict[str, Any]] = []
        self.ask("session.new", {"capabilities": {}})
        self.ask("session.subscribe", {"events": EVENTS})
        self.context = self.ask("browsingContext.getTree", {})["contexts"][0]["context"]

    def _connected(self) -> Any:
        for _ in range(200):
            try:
                return create_connection(f"ws://127.0.0.1:{PORT}/session", timeout=90, suppress_origin=True)
            except OSError:
                time.sleep(0.1)
        raise SystemExit("Firefox does not answer")

    def ask(self, method: str, params: dict[str, Any]) -> Any:
        """Send a command and return its result; events that come in between are kept."""
        self.number += 1
        self.socket.send(json.dumps({"id": self.number, "method": method, "params": params}))
        while True:
            answer = json.loads(self.socket.recv())
            if answer.get("type") == "event":
                self.events.append(answer)
            elif answer.get("id") == self.number:
                if answer["type"] == "error":
                    raise RuntimeError(answer["message"])
                return answer["result"]

    def open(self, url: str, width: int) -> list[int]:
        """Open a page and return its figures, those that live, its width and the window's."""
        self.events.clear()
        size = {"context": self.context, "viewport": {"width": width, "height": 1000}}
        self.ask("browsingContext.setViewport", size)
        self.ask("browsingContext.navigate", {"context": self.context, "url": url, "wait": "complete"})
        script = {"expression": LIVE, "target": {"context": self.context}, "awaitPromise": True}
        found = self.ask("script.evaluate", script)
        made: list[int] = json.loads(found["result"]["value"])
        return made

    def said(self) -> list[str]:
        """What the console said since the page was opened."""
        entries = [e["params"] for e in self.events if e["method"] == "log.entryAdded"]
        return [f"{entry['level']}: {entry['text']}" for entry in entries]

    def asked(self) -> list[str]:
        """Every address asked for since the page was opened."""
        sent = [e["params"] for e in self.events if e["method"] == "network.beforeRequestSent"]
        urls = [request["request"]["url"] for request in sent]
        return [url for url in urls if not url.startswith(("data:", "blob:", "about:"))]

    def close(self) -> None:
        """End it."""
        self.socket.close()
        self.process.terminate()
        self.process.wait(30)


def look(site: Path, width: int) -> list[str]:
    """Open one page of every kind and return what is wrong, a line each."""
    wrong = []
    with tempfile.TemporaryDirectory() as profile:
        firefox = Firefox(Path(profile))
        try:
            for name in one_of_every_kind(site):
                figures, live, wide, window = firefox.open(address(site / name), width)
                print(f"{name}: {live} of {figures} figures live, {wide} of {window} px", flush=True)
                wrong += [f"{name}: a figure is not live"] * (figures - live)
                wrong += [f"{name}: wider than the window"] * (wide > window)
                wrong += [f"{name}: {words}" for words in firefox.said()]
                wrong += [f"{name}: asks for {url}" for url in outside(firefox.asked(), site)]
        finally:
            firefox.close()
    return wrong


def one_of_every_kind(site: Path) -> list[str]:
    """Every page of the strip and of the method, and the first module, sensor and note."""
    names = sorted(path.name for path in site.glob("*.html"))
    many = ("module-", "sensor-", "note-")
    first = [next((n for n in names if n.startswith(kind)), None) for kind in many]
    return [n for n in names if not n.startswith(many)] + [n for n in first if n]


def main() -> int:
    """Look at the site named on the command line at two widths."""
    site = Path(sys.argv[1]).resolve()
    wrong = [f"{width} px, {line}" for width in (1440, 390) for line in look(site, width)]
    print("\n".join(wrong) or "nothing wrong")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
