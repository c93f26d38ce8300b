"""The output folder of a batch: what it lists, its journal, what of it is safe to replace or to remove."""

import os
from pathlib import Path

from glidesmith.bank import Stamp, folder_made
from glidesmith.currency import file_digest, output_stamp
from glidesmith.errors import OutputError
from glidesmith.manifest import MANIFEST_FILE, Journal, OutputFacts, Record, Records, read_manifest
from glidesmith.outcome import SUMMARY_FILE
from glidesmith.partfile import is_leftover, output_error
from glidesmith.production import LocalPlace, Place
from glidesmith.text import file_name


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
        self.journal.read()
        self.records, self.damaged = read_manifest(manifest, self.journal.manifest)
        for item, line in self.journal.lines.items():
            self.records.put(item, line)
        is_new = not self.journal.outputs and not self.journal.begun and not manifest.exists()
        if is_new and os.path.lexists(self.folder / SUMMARY_FILE):
            raise OutputError(
                f"{file_name(self.folder / SUMMARY_FILE)}: belongs to no batch, and would be overwritten; "
                "move it elsewhere, or choose another folder"
            )

    def require_writable(self, item: str) -> None:
        """Raise OutputError where something that is not the batch's own stands in an output's place."""
        is_own = item in self.records or item in self.journal.begun or item in self.journal.outputs
        if not is_own and os.path.lexists(self.path(item)):
            name = file_name(self.path(item))
            raise OutputError(
                f"{name}: is there already, and no manifest lists it; move it elsewhere, or choose another "
                "folder or name"
            )

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
            if is_leftover(part):
                part.unlink(missing_ok=True)
        if self.journal.begun:  # the workers of a cluster have part files of their own
            from glidesmith.places import SharedFolder

            SharedFolder(self.folder).sweep()

    def remove(self, item: str) -> None:
        """Remove an output that is as it was written, and the folders above it that are empty then.

        Raises OutputError where it is not, or stands behind a link, or can't be removed.
        """
        line, path = self.records.line(item), Path(self.path(item))
        inner = [folder for folder in path.parents if folder != self.folder and self.folder in folder.parents]
        if any(folder.is_symlink() for folder in inner):
            raise OutputError(f"{file_name(path)}: stands behind a link, so it is not removed")
        if line is None or self.digest(item) != line.file_sha256:
            raise OutputError(f"{file_name(path)}: is not as it was written, so it is not removed")
        try:
            path.unlink()
            for folder in inner:
                if os.listdir(folder):  # noqa: PTH208 - closes what it opens
                    break
                folder.rmdir()
        except OSError as problem:
            raise output_error(str(path), problem) from None

    def forget(self, item: str) -> None:
        """List an output no longer."""
        self.records.drop(item)
        self.journal.outputs.pop(item, None)


def desk_at(output: str | os.PathLike[str]) -> Desk:
    """The desk of a folder, or of an address that `fsspec` knows. Raises SettingError for an unknown one."""
    if isinstance(output, str) and "://" in output:
        from glidesmith.addressdesk import AddressDesk

        return AddressDesk(output)
    return Desk(Path(output))
