"""The desk of a batch whose outputs stand at an address: WAVs there, the books here, and copies there.

Journal, manifest and summary are kept in a folder of the user's own on this machine, named after the address
without its credentials, so that a batch can be gone on with; whenever they are settled, manifest and summary
are brought to the address. On another machine the manifest that is found there is taken up. An output is
known by its size, from one listing at the beginning, since not every place tells times that can be trusted;
`verify` hashes. Two machines that work on one address at once don't keep each other out; their files are
whole all the same.
"""

import hashlib
import os
import sys
from pathlib import Path

from glidesmith.bank import Stamp, folder_made
from glidesmith.desk import Desk
from glidesmith.errors import OutputError
from glidesmith.manifest import MANIFEST_FILE, Record
from glidesmith.outcome import SUMMARY_FILE
from glidesmith.partfile import output_error
from glidesmith.places import RemotePlace
from glidesmith.text import write_whole

_NO_TIME = 0


def books_folder(label: str) -> Path:
    """Where the books of an address are kept; on Linux by the XDG Base Directory Specification."""
    home = os.environ.get("HOME") or str(Path.home())
    if sys.platform == "win32":
        root = Path(os.environ.get("LOCALAPPDATA") or Path(home, "AppData", "Local"))
    elif sys.platform == "darwin":
        root = Path(home, "Library", "Application Support")
    else:
        root = Path(os.environ.get("XDG_STATE_HOME", ""))
        if not root.is_absolute():
            root = Path(home, ".local", "state")
    return root / "glidesmith" / "batches" / hashlib.sha256(label.encode("utf-8")).hexdigest()[:24]


class AddressDesk(Desk):
    """What an address lists, and the books about it in a folder here."""

    def __init__(self, address: str) -> None:
        """Raises SettingError for an address that `fsspec` does not know."""
        self._remote = RemotePlace(address)
        self._sizes: dict[str, int] = {}
        self.address = self._remote.label
        super().__init__(books_folder(self.address))

    def held(self) -> Desk:
        """Make the books' folder, for this user alone, and lock it. Raises OutputError."""
        if not self.folder.exists():
            folder_made(self.folder.parent)
            try:
                self.folder.mkdir(mode=0o700, exist_ok=True)
            except OSError as problem:
                raise output_error(str(self.folder), problem) from None
        return super().held()

    def look(self) -> None:
        """See what is there, and read the books. Raises OutputError."""
        self._sizes = self._remote.sizes()
        self._take_up_manifest()
        super().look()

    def _take_up_manifest(self) -> None:
        """Take the manifest of the address where the one here is another: somebody else was at work there."""
        here, there = self.folder / MANIFEST_FILE, self._sizes.get(MANIFEST_FILE)
        known = here.stat().st_size if here.exists() else None
        if there is None or there == known or not self.folder.is_dir():
            return
        content = self._remote.read(MANIFEST_FILE)
        if content is not None:
            write_whole(here, content)

    def require_writable(self, item: str) -> None:
        """Raise OutputError where something that is not the batch's own stands in an output's place."""
        is_own = item in self.records or item in self.journal.begun or item in self.journal.outputs
        if not is_own and item in self._sizes:
            raise OutputError(
                f"{self.address}/{item}: is there already, and no manifest lists it; move it elsewhere, or "
                "choose another place or name"
            )

    def place(self) -> RemotePlace:
        """Where outputs are written to."""
        return self._remote

    def stamp(self, item: str) -> Stamp | None:
        """The size of an output, and no time; None where there is none."""
        size = self._sizes.get(item)
        return None if size is None else (size, _NO_TIME)

    def stamp_made(self, record: Record) -> Stamp | None:
        """The size of an output that was made just now, as its maker tells it."""
        self._sizes[record["item"]] = record["bytes"]
        return record["bytes"], _NO_TIME

    def digest(self, item: str) -> str | None:
        """SHA-256 of an output; None where there is none. It is read for that."""
        return self._remote.digest(item)

    def has(self, name: str) -> bool:
        """Whether the manifest or the summary is here and there."""
        return super().has(name) and name in self._sizes

    def publish(self) -> None:
        """Bring manifest and summary to the address. Raises OutputError."""
        for name in (SUMMARY_FILE, MANIFEST_FILE):
            self._remote.send(self.folder / name, name)

    def sweep(self) -> None:
        """Remove part files that a killed run left."""
        if self.journal.begun:
            self._remote.sweep()

    def remove(self, item: str) -> None:
        """Remove an output that is as it was written. Raises OutputError where it is not."""
        line = self.records.line(item)
        if line is None or self.digest(item) != line.file_sha256:
            raise OutputError(f"{self.address}/{item}: is not as it was written, so it is not removed")
        self._remote.remove(item)
        self._sizes.pop(item, None)
