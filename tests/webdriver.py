"""A browser driven as the W3C's WebDriver recommendation says: JSON over HTTP to Debian's chromedriver."""

import json
import re
import subprocess
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

ELEMENT = "element-6066-11e4-a52e-4f735466cecf"  # the recommendation's web element identifier
DIRECT = urllib.request.build_opener(urllib.request.ProxyHandler({}))
FLAGS = ("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-sync",
         "--disable-background-networking", "--disable-component-update", "--hide-scrollbars")  # fmt: skip


class Browser:
    """One session. `js` runs a script in the page; its last value comes back."""

    def __init__(self, address: str, binary: str, profile: Path) -> None:
        self.address = address
        options = {"binary": binary, "args": [*FLAGS, f"--user-data-dir={profile}"]}
        wanted = {"goog:chromeOptions": options, "goog:loggingPrefs": {"browser": "ALL", "performance": "ALL"}}
        self.session = self._ask("POST", "/session", {"capabilities": {"alwaysMatch": wanted}})["sessionId"]

    def _ask(self, verb: str, path: str, body: dict[str, Any] | None = None) -> Any:
        data = None if body is None else json.dumps(body).encode()
        request = urllib.request.Request(self.address + path, data, {"Content-Type": "application/json"}, method=verb)
        try:
            with DIRECT.open(request, timeout=60) as answer:
                return json.load(answer)["value"]
        except urllib.error.HTTPError as error:
            raise AssertionError(json.load(error)["value"]["message"]) from None

    def ask(self, verb: str, path: str, body: dict[str, Any] | None = None) -> Any:
        return self._ask(verb, f"/session/{self.session}{path}", body)

    def open(self, page: Path) -> None:
        self.ask("POST", "/url", {"url": page.as_uri()})

    def js(self, script: str, *arguments: object) -> Any:
        return self.ask("POST", "/execute/sync", {"script": script, "args": list(arguments)})

    def wait(self, script: str, seconds: float = 10.0) -> None:
        """Until a script answers true."""
        end = time.monotonic() + seconds
        while not self.js(script):
            assert time.monotonic() < end, script
            time.sleep(0.05)

    def click(self, selector: str) -> None:
        element = self.ask("POST", "/element", {"using": "css selector", "value": selector})[ELEMENT]
        self.ask("POST", f"/element/{element}/click", {})

    def press(self, *keys: str) -> None:
        """Real key presses to what has the focus."""
        steps = [{"type": kind, "value": key} for key in keys for kind in ("keyDown", "keyUp")]
        self.ask("POST", "/actions", {"actions": [{"type": "key", "id": "keys", "actions": steps}]})

    def cdp(self, command: str, **parameters: object) -> Any:
        return self.ask("POST", "/goog/cdp/execute", {"cmd": command, "params": parameters})

    def log(self, kind: str) -> list[dict[str, Any]]:
        """What was logged since last asked."""
        return self.ask("POST", "/se/log", {"type": kind})

    def requested(self) -> list[str]:
        """Addresses of everything the page has asked for since last asked."""
        events = [json.loads(entry["message"])["message"] for entry in self.log("performance")]
        return [event["params"]["request"]["url"] for event in events if event["method"] == "Network.requestWillBeSent"]


@contextmanager
def browser(driver: str, binary: str, profile: Path) -> Iterator[Browser]:
    """A session on a driver of its own; both end with the block."""
    process = subprocess.Popen([driver, "--port=0"], stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    try:
        assert process.stdout
        port = next(found[1] for line in process.stdout if (found := re.search(r"successfully on port (\d+)", line)))
        session = Browser(f"http://127.0.0.1:{port}", binary, profile)
        try:
            yield session
        finally:
            session.ask("DELETE", "")
    finally:
        process.terminate()
        process.wait(10)
