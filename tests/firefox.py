"""Debian's Firefox for tests, driven by WebDriver BiDi (W3C) over a web socket; nothing is downloaded."""

import asyncio
import re
import shutil
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path
from typing import Any

FIREFOX = shutil.which("firefox-esr")
NEEDED = "needs Debian's package `firefox-esr`, and `aiohttp` from PyPI"
LONGEST_WAIT_S = 60.0

PREFERENCES = """
user_pref("media.autoplay.default", 0);
user_pref("network.proxy.type", 1);
user_pref("network.proxy.http", "127.0.0.1");
user_pref("network.proxy.http_port", 9);
user_pref("network.proxy.ssl", "127.0.0.1");
user_pref("network.proxy.ssl_port", 9);
user_pref("network.captive-portal-service.enabled", false);
user_pref("network.connectivity-service.enabled", false);
user_pref("browser.shell.checkDefaultBrowser", false);
"""
"""No way to any network: all goes to a port of this machine at which nothing answers."""


class FirefoxTab:
    """A page in Firefox: what it logged and what it asked the network for."""

    def __init__(self, socket: Any) -> None:
        self._socket = socket
        self._count = 0
        self.context = ""
        self.logged: list[str] = []
        self.requests: list[str] = []

    async def command(self, method: str, **parameters: Any) -> dict[str, Any]:
        """Send a command and wait for its answer; what the page logs meanwhile is kept."""
        self._count += 1
        await self._socket.send_json({"id": self._count, "method": method, "params": parameters})
        while True:
            answer = await self._socket.receive_json()
            if answer.get("id") == self._count:
                assert answer["type"] == "success", answer
                return answer["result"]
            self._keep(answer)

    def _keep(self, event: dict[str, Any]) -> None:
        if event["method"] == "log.entryAdded":
            self.logged.append(f"{event['params']['level']}: {event['params']['text']}")
        elif event["method"] == "network.beforeRequestSent":
            self.requests.append(event["params"]["request"]["url"])

    async def evaluate(self, expression: str) -> Any:
        """The value of an expression, as if a user had just clicked; what comes later is waited for."""
        found = await self.command(
            "script.evaluate",
            expression=f"Promise.resolve({expression}).then(JSON.stringify)",
            target={"context": self.context},
            awaitPromise=True,
            userActivation=True,
        )
        assert found["type"] == "success", found
        return found["result"].get("value")

    async def wait_until(self, condition: str) -> None:
        """Wait until an expression is true."""
        while await self.evaluate(condition) != "true":
            await asyncio.sleep(0.05)

    async def open(self, path: Path) -> None:
        """Open a page from disk and wait until its clips are decoded."""
        await self.command(
            "browsingContext.navigate", context=self.context, url=path.as_uri(), wait="complete"
        )
        await self.wait_until("!document.getElementById('play').disabled")


@asynccontextmanager
async def firefox(profile: Path) -> AsyncIterator[FirefoxTab]:
    """A Firefox of its own with an empty page, ended at the end or after `LONGEST_WAIT_S`."""
    import aiohttp

    (profile / "user.js").write_text(PREFERENCES)
    process = await asyncio.create_subprocess_exec(
        str(FIREFOX), "--headless", "--no-remote", "--profile", str(profile), "--remote-debugging-port", "0",
        stdout=asyncio.subprocess.DEVNULL, stderr=asyncio.subprocess.PIPE,
    )  # fmt: skip
    try:
        async with asyncio.timeout(LONGEST_WAIT_S):
            address = await _address(process)
            async with (
                aiohttp.ClientSession() as client,
                client.ws_connect(f"{address}/session", max_msg_size=0) as socket,
            ):
                tab = FirefoxTab(socket)
                await tab.command("session.new", capabilities={})
                events = ["log.entryAdded", "network.beforeRequestSent"]
                await tab.command("session.subscribe", events=events)
                tree = await tab.command("browsingContext.getTree")
                tab.context = tree["contexts"][0]["context"]
                yield tab
    finally:
        with suppress(ProcessLookupError):
            process.kill()
        await process.wait()


async def _address(process: Any) -> str:
    while line := (await process.stderr.readline()).decode():
        if found := re.search(r"WebDriver BiDi listening on (ws://\S+)", line):
            return found[1]
    raise AssertionError("Firefox ended without listening")
