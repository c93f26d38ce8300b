"""The panel's page as text: its parts joined, with a policy that lets nothing else run."""

from functools import cache

from glidesmith import pageparts
from glidesmith.pageparts import joined, part

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
    skeleton = part("panel.html")
    return (
        skeleton.replace("{{style}}", joined(STYLES)).replace("{{script}}", joined(SCRIPTS)).encode("utf-8")
    )


@cache
def worklet_script() -> bytes:
    """The script that plays the sound inside the browser's audio thread."""
    return part(WORKLET).encode("utf-8")


@cache
def policy() -> str:
    """The content security policy (W3C, Content Security Policy Level 3) that the page is sent with.

    This very script and style, the player's script from the same server, and the socket there: all else is
    refused, whatever text from a file ends up on the page.
    """
    return pageparts.policy(
        joined(SCRIPTS),
        joined(STYLES),
        "connect-src 'self'",
        "frame-ancestors 'none'",
        more_scripts="'self'",
    )
