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
from glidesmith.currency import file_digest
from glidesmith.desk import HEAD_BYTES, Desk, in_the_way, is_made_with
from glidesmith.errors import OutputError
from glidesmith.manifest import MANIFEST_FILE, Record, check_head
from glidesmith.outcome import SUMMARY_FILE
from glidesmith.partfile import begins_as_ours, output_error
from glidesmith.places import RemotePlace
from glidesmith.text import printable, write_whole

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
        was_taken_up = self._take_up_manifest()
        super().look()
        if was_taken_up:  # what a run here that was cut short has made may have been replaced since
            for item in self.journal.lines:
                self.journal.outputs.pop(item, None)

    def _take_up_manifest(self) -> bool:
        """Take the manifest of the address where the one here is another: somebody else was at work there.

        Nothing is kept of a file that is no manifest. Raises OutputError.
        """
        if MANIFEST_FILE not in self._sizes or not self.folder.is_dir():
            return False
        self.require_own_names()
        here = self.folder / MANIFEST_FILE
        same_size = here.exists() and self._sizes[MANIFEST_FILE] == here.stat().st_size
        if same_size and self._remote.digest(MANIFEST_FILE) == file_digest(here):
            return False
        content = self._remote.read(MANIFEST_FILE)
        if content is None:
            return False
        check_head(content.partition(b"\n")[0], self.called(MANIFEST_FILE))
        write_whole(here, content)
        return True

    def _is_summary_foreign(self, is_new: bool) -> bool:
        """Whether somebody else's file stands in the summary's place; ``is_new``: no batch is known here."""
        if SUMMARY_FILE not in self._sizes or MANIFEST_FILE in self._sizes:
            return False
        return is_new or not begins_as_ours(self._remote.head(SUMMARY_FILE, HEAD_BYTES))

    def called(self, name: str) -> str:
        """What people call a file of the batch."""
        return printable(f"{self.address}/{name}")

    def key(self, item: str) -> str:
        """What two names have in common that stand for one file: they are told apart."""
        return item

    def require_writable(self, item: str, settings_sha256: str) -> None:
        """Raise OutputError where something that is not the batch's own stands in an output's place.

        Where there is no manifest, what the books here say may be of files that were replaced since.
        """
        line = self.records.line(item)
        if item not in self._sizes or (line is not None and MANIFEST_FILE in self._sizes):
            return
        head = self._remote.head(item, HEAD_BYTES)
        is_own = is_made_with(head, settings_sha256)
        is_own |= item in self.journal.begun and begins_as_ours(head)
        if not is_own and (line is None or self.digest(item) != line.file_sha256):
            raise in_the_way(self.called(item), head)

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

    def has_summary(self, told: str, verify: bool) -> bool:
        """Whether the summary is as it was written, here and there."""
        known = self.journal.summary
        if known is None or self._sizes.get(SUMMARY_FILE) != known.stamp[0]:
            return False
        if verify and self.digest(SUMMARY_FILE) != known.file_sha256:
            return False
        return super().has_summary(told, verify)

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
