"""The output folder of a batch: what it lists, its journal, what of it is safe to replace or to remove."""

import contextlib
import os
import stat
from functools import cached_property
from pathlib import Path

from glidesmith.bank import Stamp, folded, folder_made
from glidesmith.currency import file_digest, output_stamp
from glidesmith.errors import OutputError, SettingError
from glidesmith.manifest import (
    MANIFEST_FILE,
    Journal,
    OutputFacts,
    Record,
    Records,
    SummaryFacts,
    read_manifest,
)
from glidesmith.outcome import SUMMARY_FILE
from glidesmith.partfile import begins_as_ours, is_leftover, output_error
from glidesmith.production import LocalPlace, Place
from glidesmith.text import file_name, shown

HEAD_BYTES = 1 << 16


class Desk:
    """The output folder: what it lists, its journal, and the lock while it is `held`.

    ``address`` is what people call the place of outputs that stand elsewhere (`glidesmith.addressdesk`).
    """

    address = ""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.journal = Journal(folder)
        self.damaged: list[str] = []
        self.records = Records()

    def held(self) -> "Desk":
        """Make the folder if need be, and lock it; a context manager lets it go. Raises OutputError."""
        folder_made(self.folder)
        self.journal.hold()
        return self

    def __enter__(self) -> "Desk":
        return self

    def __exit__(self, *_: object) -> None:
        self.records.close()
        self.journal.close()

    def look(self) -> None:
        """Read the manifest and the journal. Raises OutputError where what is there is none of ours."""
        self.records.close()
        manifest = self.folder / MANIFEST_FILE
        self.require_own_names()
        self.journal.read()
        self.records, self.damaged = read_manifest(manifest, self.journal.manifest)
        for item, line in self.journal.lines.items():
            self.records.put(item, line)
        is_new = not self.journal.outputs and not self.journal.begun and not manifest.exists()
        if self._is_summary_foreign(is_new):
            raise OutputError(
                f"{self.called(SUMMARY_FILE)}: belongs to no batch, and would be overwritten; move it "
                "elsewhere, or choose another folder"
            )

    def _is_summary_foreign(self, is_new: bool) -> bool:
        """Whether somebody else's file stands in the summary's place; ``is_new``: there was no batch yet."""
        return is_new and os.path.lexists(self.folder / SUMMARY_FILE)

    def called(self, name: str) -> str:
        """What people call a file of the batch."""
        return file_name(self.folder / name)

    def require_own_names(self) -> None:
        """Raise OutputError where manifest or summary is a link, or no file: it would be followed."""
        for name in (MANIFEST_FILE, SUMMARY_FILE):
            with contextlib.suppress(FileNotFoundError, NotADirectoryError):
                path = self.folder / name
                if not stat.S_ISREG(path.lstat().st_mode):
                    raise OutputError(
                        f"{file_name(path)}: is a link, or no regular file, and would be overwritten; move "
                        "it elsewhere, or choose another folder"
                    )

    def key(self, item: str) -> str:
        """What two names have in common that stand for one file here."""
        return folded(item) if self._ignores_case else os.path.normcase(item)

    @cached_property
    def _ignores_case(self) -> bool:
        name = self.journal.path.name.upper()
        return self.journal.path.exists() and os.path.lexists(self.folder / name)

    def require_writable(self, item: str, settings_sha256: str) -> None:
        """Raise OutputError where something that is not the batch's own stands in an output's place.

        Its own is what is listed or was begun, and, should the journal be lost, a WAV with those settings.
        """
        is_own = item in self.records or item in self.journal.begun or item in self.journal.outputs
        if is_own or not os.path.lexists(self.path(item)):
            return
        head = _head(self.path(item))
        if not is_made_with(head, settings_sha256):
            raise in_the_way(self.called(item), head)

    def path(self, item: str) -> str:
        """Where an output stands."""
        return f"{self.folder}/{item}"

    def place(self) -> Place:
        """Where outputs are written to."""
        return LocalPlace(self.folder)

    def stamp(self, item: str) -> Stamp | None:
        """The stamp of an output; None where there is none."""
        return output_stamp(self.path(item))

    def stamp_made(self, record: Record) -> Stamp | None:
        """The stamp of an output that was made just now; None where it is gone already."""
        return self.stamp(record["item"])

    def digest(self, item: str) -> str | None:
        """SHA-256 of an output; None where there is none."""
        return file_digest(Path(self.path(item)))

    def is_whole(self, item: str, known: OutputFacts, verify: bool) -> bool:
        """Whether an output is as it was written: by its stamp, or by its hash if that is to be verified."""
        stamp = self.stamp(item)
        if stamp is None:
            return False
        return self.digest(item) == known.file_sha256 if verify else stamp == known.stamp

    def has(self, name: str) -> bool:
        """Whether the manifest or the summary is where it belongs."""
        return (self.folder / name).exists()

    def has_summary(self, told: str, verify: bool) -> bool:
        """Whether the summary is as it was written, of a title and failures that have the hash ``told``."""
        known, path = self.journal.summary, self.folder / SUMMARY_FILE
        if known is None or known.told != told or not self.has(SUMMARY_FILE):
            return False
        return (output_stamp(path) == known.stamp and not verify) or file_digest(path) == known.file_sha256

    def remember_summary(self, told: str) -> None:
        """Note how the summary looks that was written just now."""
        path = self.folder / SUMMARY_FILE
        stamp, digest = output_stamp(path), file_digest(path)
        self.journal.summary = SummaryFacts(stamp, digest, told) if stamp and digest else None

    def publish(self) -> None:
        """Bring manifest and summary to where the outputs are; here they are there."""

    def require_held(self) -> None:
        """Raise OutputError where the folder was taken away meanwhile."""
        if not self.journal.is_held:
            raise OutputError(
                f"{file_name(self.folder)}: was removed or replaced while the batch ran; run it again"
            )

    def sweep(self) -> None:
        """Remove part files that a killed run left beside what it had begun."""
        for item in self.journal.begun:
            part = Path(self.path(item) + ".part")
            if is_leftover(part) and not self._is_behind_link(part):
                part.unlink(missing_ok=True)
        if self.journal.begun:  # the workers of a cluster have part files of their own
            from glidesmith.places import SharedFolder

            SharedFolder(self.folder).sweep()

    def remove(self, item: str) -> None:
        """Remove an output that is as it was written, and the folders above it that are empty then.

        Raises OutputError where it is not, or stands behind a link, or can't be removed.
        """
        line, path = self.records.line(item), Path(self.path(item))
        if self._is_behind_link(path):
            raise OutputError(f"{file_name(path)}: stands behind a link, so it is not removed")
        if line is None or self.digest(item) != line.file_sha256:
            raise OutputError(f"{file_name(path)}: is not as it was written, so it is not removed")
        try:
            path.unlink()
            for folder in self._inner(path):
                if os.listdir(folder):  # noqa: PTH208 - closes what it opens
                    break
                folder.rmdir()
        except OSError as problem:
            raise output_error(str(path), problem) from None

    def _inner(self, path: Path) -> list[Path]:
        """The folders between a file and the output folder."""
        return [folder for folder in path.parents if folder != self.folder and self.folder in folder.parents]

    def _is_behind_link(self, path: Path) -> bool:
        return any(folder.is_symlink() for folder in self._inner(path))

    def forget(self, item: str) -> None:
        """List an output no longer."""
        self.records.drop(item)
        self.journal.outputs.pop(item, None)


def _head(path: str) -> bytes:
    """The first bytes of a regular file; none of anything else."""
    flags = os.O_RDONLY | getattr(os, "O_NOFOLLOW", 0) | getattr(os, "O_NONBLOCK", 0)
    with contextlib.suppress(OSError), os.fdopen(os.open(path, flags), "rb") as file:
        if stat.S_ISREG(os.fstat(file.fileno()).st_mode):
            return file.read(HEAD_BYTES)
    return b""


def is_made_with(head: bytes, settings_sha256: str) -> bool:
    """Whether a file that begins so is a WAV that Glidesmith has made with those settings."""
    return bool(head) and begins_as_ours(head) and f"Settings {settings_sha256}".encode() in head


def in_the_way(name: str, head: bytes) -> OutputError:
    """What to say of a file in an output's place that begins so."""
    if head.startswith((b"RIFF", b"RF64")) and begins_as_ours(head):
        hint = "if a run made it whose books are lost, remove it; else move it"
    else:
        hint = "move it"
    return OutputError(
        f"{name}: is there already, and no manifest lists it; {hint} elsewhere, or choose another folder or "
        "name"
    )


def desk_at(output: str | os.PathLike[str]) -> Desk:
    """The desk of a folder, or of an address that `fsspec` knows. Raises SettingError for an unknown one."""
    if isinstance(output, str) and "://" in output:
        from glidesmith.places import folder_at

        folder = folder_at(output)
        if folder is not None:
            return Desk(folder)
        from glidesmith.addressdesk import AddressDesk

        return AddressDesk(output)
    if not isinstance(output, str | os.PathLike):
        raise SettingError(f"output {shown(output)}: give a path, or an address as text")
    return Desk(Path(output))
