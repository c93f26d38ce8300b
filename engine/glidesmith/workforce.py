"""The workers of a cluster as a batch sees them: who may be used, who not and why, who came and who went."""

import time
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING

from glidesmith.errors import ClusterError
from glidesmith.scheduler import LONGEST_SAID
from glidesmith.text import counted, printable, shortened
from glidesmith.worker import Terms, difference, make_here, make_of_this_process, muster, terms_as_json

if TYPE_CHECKING:
    from distributed import Client

WORKERS_S = 10.0
"""How long a scheduler may be without any worker that can be used, at the beginning and later."""

_POLL_S = 0.25

Tell = Callable[[str], None]


class Workforce:
    """The workers: which may be used, how many threads they have, which were lost."""

    def __init__(self, address: str, tell: Tell) -> None:
        self._address, self._tell = address, tell
        self._used: dict[str, int] = {}
        self._refused: dict[str, str] = {}
        self._alone_since: float | None = None
        self.lost = False

    @property
    def threads(self) -> int:
        """How many errands the workers can be at, all together."""
        return sum(self._used.values())

    def restriction(self) -> list[str] | None:
        """The workers that may be used, where not all may."""
        return sorted(self._used) if self._refused else None

    def has_any(self, workers: list[str]) -> bool:
        """Whether one of these may be used and is still there."""
        return any(address in self._used for address in workers)

    def gather(self, client: "Client") -> None:
        """Wait until there is a worker."""
        deadline = time.monotonic() + WORKERS_S
        while not client.nthreads():
            if time.monotonic() > deadline:
                raise self._none()
            time.sleep(_POLL_S)

    def settled_terms(self, client: "Client", terms: Terms) -> Terms:
        """Look the first workers over, settle which type of processor is used, and have them compile."""
        makes = {
            address: answer
            for address, answer in client.run(make_here, on_error="return").items()
            if isinstance(answer, dict) and difference(answer, terms.make) is None
        }
        kinds = [make["processor"] for make in makes.values()]
        here = make_of_this_process()["processor"]
        if kinds:
            kind = max(sorted(set(kinds)), key=lambda name: (kinds.count(name), name == here))
            terms = Terms(
                terms.run, terms.output, terms.token_name, terms.token, {**terms.make, "processor": kind}
            )
            if kind != here:
                self._tell(
                    f"cluster {self._address}: its workers are of the processor type {printable(kind)} and "
                    f"this machine is {printable(here)}; bytes may differ from those made here"
                )
        self._admit(client, terms, client.nthreads(), compile_first=True)
        if not self._used:
            raise self._unusable()
        return terms

    def look(self, client: "Client", terms: Terms) -> None:
        """See who came and who went. Raises ClusterError where nobody was there for too long."""
        if client.status != "running":  # whoever waits for results is told
            return
        try:
            present = client.nthreads()
            for address in self._used.keys() - present.keys():
                del self._used[address]
                self.lost = True
            new = {
                address: count
                for address, count in present.items()
                if address not in self._used and address not in self._refused
            }
            if new:
                self._admit(client, terms, new, compile_first=False)
        except OSError:
            return
        if self._used:
            self._alone_since = None
        elif self._alone_since is None:
            self._alone_since = time.monotonic()
        elif time.monotonic() - self._alone_since > WORKERS_S:
            raise self._unusable() if present else self._none()

    def _admit(self, client: "Client", terms: Terms, new: Mapping[str, int], compile_first: bool) -> None:
        answers = client.run(
            muster, terms_as_json(terms), compile_first, workers=sorted(new), on_error="return"
        )
        for address, answer in sorted(answers.items()):
            reason = answer["reason"] if isinstance(answer, dict) else _unfit(answer)
            if reason is None:
                self._used[address] = new[address]
            else:
                self._refused[address] = reason
                self._tell(f"worker {printable(address)} is not used: it {reason}")

    def _none(self) -> ClusterError:
        return ClusterError(
            f"cluster {self._address}: has no workers; start some with `dask worker {self._address}`"
        )

    def _unusable(self) -> ClusterError:
        address, reason = next(iter(sorted(self._refused.items())), ("", "went away"))
        many = counted(len(self._refused), "worker", "workers")
        return ClusterError(
            f"cluster {self._address}: none of its workers can be used ({many} refused); "
            f"{printable(address)} {reason}"
        )


def _unfit(problem: object) -> str:
    said = printable(shortened(" ".join(str(problem).split()), LONGEST_SAID))
    return f"has not this version of Glidesmith ({type(problem).__name__}: {said})"
