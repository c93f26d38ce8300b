"""The panel's page as text: its parts joined, with a policy that lets nothing else run."""

import base64
import hashlib
from functools import cache
from pathlib import Path

PARTS = Path(__file__).with_name("page_parts")

STYLES = ("page.css", "panel.css")
SCRIPTS = (
    "text.js",
    "lines.js",
    "panel_values.js",
    "panel_laws.js",
    "panel_link.js",
    "panel_trace.js",
    "panel_graph.js",
    "panel_transfer.js",
    "panel_settings.js",
    "panel_slots.js",
    "panel_facts.js",
    "panel_notes.js",
    "panel_sound.js",
    "panel_meters.js",
    "panel_files.js",
    "panel.js",
)
WORKLET = "panel_worklet.js"


@cache
def panel_page() -> bytes:
    """The page, one file with its style and script inside."""
    skeleton = _part("panel.html")
    return (
        skeleton.replace("{{style}}", _joined(STYLES)).replace("{{script}}", _joined(SCRIPTS)).encode("utf-8")
    )


@cache
def worklet_script() -> bytes:
    """The script that plays the sound inside the browser's audio thread."""
    return _part(WORKLET).encode("utf-8")


@cache
def policy() -> str:
    """The content security policy (W3C, Content Security Policy Level 3) that the page is sent with.

    This very script and style, the player's script from the same server, and the socket there: all else is
    refused, whatever text from a file ends up on the page.
    """
    return "; ".join(
        (
            "default-src 'none'",
            f"script-src 'self' '{_source_hash(_joined(SCRIPTS))}'",
            f"style-src '{_source_hash(_joined(STYLES))}'",
            "connect-src 'self'",
            "img-src data:",
            "base-uri 'none'",
            "form-action 'none'",
            "frame-ancestors 'none'",
        )
    )


def _part(name: str) -> str:
    return (PARTS / name).read_text(encoding="utf-8")


@cache
def _joined(names: tuple[str, ...]) -> str:
    return "\n".join(_part(name) for name in names)


def _source_hash(text: str) -> str:
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode("utf-8")).digest()).decode("ascii")
