"""What a run of a batch did: how much was made, what failed and why, and which glides no longer land."""

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from glidesmith.manifest import MANIFEST_FILE, Line, Record

SUMMARY_FILE = "summary.html"


@dataclass(frozen=True, slots=True)
class Failed:
    """What could not be made, and why, a line a mistake; ``item`` is empty where it has no name yet."""

    preset: str
    item: str
    lines: tuple[str, ...]

    def as_dict(self) -> dict[str, object]:
        """Fit for JSON."""
        return {"preset": self.preset, "item": self.item, "errors": list(self.lines)}


@dataclass(frozen=True, slots=True)
class NeverLands:
    """An item made in this run in which a glide never lands.

    ``count`` of its ``glides`` don't, ``before`` is that number in the run before, None where there was none;
    the worst goes ``worst_from`` a note ``worst_to`` another and is ``short_by_cents`` off.
    """

    item: str
    count: int
    glides: int
    before: int | None
    worst_from: str
    worst_to: str
    short_by_cents: float

    @classmethod
    def of(cls, record: Record, before: Line | None) -> "NeverLands":
        """What there is to say of a record with such a glide; ``before`` is where the last one stands."""
        never = record["never_lands"]
        worst = max(never, key=lambda glide: glide["short_by_cents"])
        return cls(
            record["item"],
            len(never),
            record["glides"],
            None if before is None else before.never_land,
            worst["from"],
            worst["to"],
            worst["short_by_cents"],
        )

    def as_dict(self) -> dict[str, object]:
        """Fit for JSON."""
        return {
            "item": self.item,
            "never_land": self.count,
            "glides": self.glides,
            "before": self.before,
            "worst": {"from": self.worst_from, "to": self.worst_to, "short_by_cents": self.short_by_cents},
        }


@dataclass
class Outcome:
    """What a run did.

    ``made``: the outputs made, or with ``dry_run`` to be made; ``current``: how many were as they should be;
    ``gone``: outputs whose preset is no more, of which ``pruned`` were removed; ``others``: how many outputs
    the manifest lists besides. ``never_land`` has the items made in which a glide never lands,
    ``all_never_land`` is how many there are in all. ``stopped`` says why the run ended before all was tried.
    ``address`` is where the outputs are if not in the folder ``output``, which then holds copies of manifest
    and summary.
    """

    folder: Path
    output: Path
    dry_run: bool = False
    made: list[str] = field(default_factory=list)
    current: int = 0
    failed: list[Failed] = field(default_factory=list)
    gone: list[str] = field(default_factory=list)
    pruned: list[str] = field(default_factory=list)
    others: int = 0
    never_land: list[NeverLands] = field(default_factory=list)
    all_never_land: int = 0
    warnings: list[str] = field(default_factory=list)
    stopped: str = ""
    address: str = ""

    @property
    def place(self) -> str:
        """What people call the place where the outputs are: a folder, or an address."""
        return self.address or str(self.output)

    @property
    def no_longer(self) -> list[NeverLands]:
        """The items of which fewer glides land than in the run before."""
        return [each for each in self.never_land if each.before is not None and each.count > each.before]

    @property
    def all_well(self) -> bool:
        """Whether nothing failed, and all was tried."""
        return not self.failed and not self.stopped

    @property
    def manifest(self) -> Path:
        """The file with a record for each output."""
        return self.output / MANIFEST_FILE

    @property
    def summary(self) -> Path:
        """The page with all of them."""
        return self.output / SUMMARY_FILE

    def as_dict(self) -> dict[str, Any]:
        """What `batch --json` prints; the records themselves are in the manifest."""
        return {
            "folder": str(self.folder),
            "output": self.place,
            "dry_run": self.dry_run,
            "made": self.made,
            "current": self.current,
            "failed": [each.as_dict() for each in self.failed],
            "gone": self.gone,
            "pruned": self.pruned,
            "others": self.others,
            "never_land": [each.as_dict() for each in self.never_land],
            "items_that_never_land": self.all_never_land,
            "warnings": self.warnings,
            "stopped": self.stopped or None,
            "manifest": f"{self.place}/{MANIFEST_FILE}",
            "summary": f"{self.place}/{SUMMARY_FILE}",
        }
