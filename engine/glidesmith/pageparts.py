"""What all pages are made of: the texts in ``page_parts``, and the policy that lets only these run."""

import base64
import hashlib
from collections.abc import Sequence
from functools import cache
from pathlib import Path

PARTS = Path(__file__).with_name("page_parts")


@cache
def part(name: str) -> str:
    """The text of one part."""
    return (PARTS / name).read_text(encoding="utf-8")


def joined(names: Sequence[str]) -> str:
    """Several parts, one after the other."""
    return "\n".join(part(name) for name in names)


def policy(script: str, style: str, *others: str, more_scripts: str = "") -> str:
    """A content security policy (W3C, Content Security Policy Level 3): all is refused but these.

    ``script`` and ``style`` are the very texts that a page holds, ``more_scripts`` another source of scripts,
    ``others`` further directives.
    """
    scripts = f"{more_scripts} '{_source_hash(script)}'".strip()
    return "; ".join(
        (
            "default-src 'none'",
            f"script-src {scripts}",
            f"style-src '{_source_hash(style)}'",
            *others,
            "img-src data:",
            "base-uri 'none'",
            "form-action 'none'",
        )
    )


def _source_hash(text: str) -> str:
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode("utf-8")).digest()).decode("ascii")
