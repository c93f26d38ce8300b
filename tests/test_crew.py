"""Jobs: what comes back, in which order, and what is left when they end."""

import os
import signal
import subprocess
import sys
import time

import pytest

from glidesmith import crew as crew_module
from glidesmith.crew import Crew
from glidesmith.production import Failure, LocalPlace, Options, run_here
from test_production import make_order


def orders(count, **changes):
    for number in range(count):
        yield make_order(item=f"{number:03d}.wav", **changes)


@pytest.fixture
def place(tmp_path):
    folder = tmp_path / "takes"
    folder.mkdir()
    return LocalPlace(folder)


@pytest.mark.parametrize("forks", [True, False])
@pytest.mark.parametrize("jobs", [1, 3])
def test_every_order_comes_back_once_as_if_made_here(place, tmp_path, jobs, forks):
    with Crew(jobs, forks) as crew:
        found = dict(crew.run(orders(9), place))
        again = dict(crew.run(orders(2), place))
    here = LocalPlace(tmp_path / "here")
    here.root.mkdir()
    wanted = dict(run_here(orders(9), here))
    assert found == wanted
    assert again == {number: wanted[number] for number in (0, 1)}
    for path in here.root.iterdir():
        assert (place.root / path.name).read_bytes() == path.read_bytes()


def test_nothing_is_started_for_nothing(place):
    with Crew(2) as crew:
        assert list(crew.run(iter(()), place)) == []
        assert crew._processes == []


def test_orders_are_asked_for_only_as_they_can_be_made(place):
    asked = []

    def counted():
        for order in orders(30):
            asked.append(order.item)
            yield order

    with Crew(2) as crew:
        for number, _ in enumerate(crew.run(counted(), place), 1):
            assert len(asked) <= number + 2 * 2


def test_what_can_not_be_made_is_told_and_the_rest_is_made(place):
    def mixed():
        yield make_order(item="a.wav")
        yield make_order(item="b.wav", options=Options(sample_rate=1))
        yield make_order(item="c.wav")

    with Crew(2) as crew:
        found = dict(crew.run(mixed(), place))
    assert isinstance(found[1], Failure)
    assert "sample rate" in found[1].lines[0]
    assert found[0]["item"] == "a.wav"
    assert found[2]["item"] == "c.wav"


def test_an_error_in_making_orders_comes_through_and_ends_the_jobs(place):
    def broken():
        yield make_order(item="a.wav")
        raise RuntimeError("no more")

    with pytest.raises(RuntimeError, match="no more"), Crew(2) as crew:
        list(crew.run(broken(), place))
    assert crew._processes == []


def test_leaving_in_the_middle_ends_the_jobs_and_leaves_no_part(place):
    crew = Crew(2)
    outcomes = crew.run(orders(50), place)
    next(outcomes)
    processes = list(crew._processes)
    crew.close()
    assert all(process.returncode is not None for process in processes)
    assert not list(place.root.glob("*.part"))
    assert len(list(place.root.iterdir())) < 50


def test_jobs_that_can_not_start_end_the_run_instead_of_starting_for_ever(place, monkeypatch):
    monkeypatch.setattr(
        crew_module, "_command", lambda numbers: [sys.executable, "-c", "raise SystemExit(3)"]
    )
    with Crew(1) as crew:
        outcomes = [outcome for _, outcome in crew.run(orders(12), place)]
    assert all(isinstance(outcome, Failure) for outcome in outcomes)
    assert outcomes[-1].fatal
    assert "ended before it was done" in outcomes[0].lines[0]


def test_a_job_that_dies_is_replaced(place):
    with Crew(1, forks=False) as crew:
        outcomes = crew.run(orders(6), place)
        first = next(outcomes)
        os.kill(crew._processes[0].pid, signal.SIGKILL)
        found = dict([first, *outcomes])
    failed = [outcome for outcome in found.values() if isinstance(outcome, Failure)]
    assert len(found) == 6
    assert len(failed) <= 1
    assert len(list(place.root.glob("*.wav"))) >= 5


def test_a_job_whose_master_goes_gives_up(place, tmp_path):
    """The master is killed; its jobs hear their pipes close, and nothing appears any more."""
    code = (
        "import sys; sys.path.insert(0, sys.argv[1])\n"
        "from pathlib import Path\n"
        "from glidesmith.crew import Crew\n"
        "from glidesmith.production import LocalPlace\n"
        "from test_crew import orders\n"
        "for _ in Crew(2).run(orders(5000), LocalPlace(Path(sys.argv[2]))): print('one', flush=True)\n"
    )
    tests = os.path.dirname(__file__)  # noqa: PTH120
    with subprocess.Popen(
        [sys.executable, "-c", code, tests, str(place.root)],
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
    ) as master:
        assert master.stdout is not None
        for _ in range(4):
            master.stdout.readline()
        master.kill()
        master.communicate()  # ends when no job holds its end any more
    there = sorted(path.name for path in place.root.iterdir())
    time.sleep(0.2)
    assert sorted(path.name for path in place.root.iterdir()) == there
    assert len(there) < 5000
    assert not [name for name in there if name.endswith(".part")]
