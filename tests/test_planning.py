"""Plans: what is ordered of a bank, in which order and under which names; nothing is made here."""

import pytest

from banks import lay_bank, lay_preset
from commands import write_midi
from glidesmith import PhraseError, SettingError
from glidesmith.desk import Desk
from glidesmith.outcome import Outcome
from glidesmith.planning import Plan, Survey, checked_request
from glidesmith.production import Options


@pytest.fixture
def bank(tmp_path):
    return lay_bank(tmp_path / "bank", "lead.toml", "basses/deep.toml")


class Planned:
    """The orders for a bank of which nothing is there, and what is told beside them."""

    def __init__(self, bank, phrases=(), chosen=(None, None, 60.0), vary=None, name=None):
        takes = bank.parent / "takes"
        request = checked_request(bank, takes, phrases, chosen, vary, name, ((), ()), Options())
        self.survey, self.outcome, self.counted = Survey(request), Outcome(bank, takes), []
        self.plan = Plan(self.survey, Desk(takes), self.outcome, self.counted.append)
        self.orders = [order for order, _ in self.plan.orders()]
        self.items = [order.item for order in self.orders]


def test_orders_come_by_preset_then_phrase_then_variation(bank, tmp_path):
    phrases = [tmp_path / "one.toml", write_midi(tmp_path / "two.mid")]
    phrases[0].write_bytes((bank / "line.toml").read_bytes())
    planned = Planned(bank, phrases, vary={"pitch.law": ["rc", "linear"]})
    assert planned.items == [
        f"{preset}_{phrase}_{law}.wav"
        for preset in ("basses/deep", "lead")
        for phrase in ("one", "two")
        for law in ("rc", "linear")
    ]
    assert planned.plan.total == 8
    assert [order.varied for order in planned.orders[:2]] == [{"pitch.law": "rc"}, {"pitch.law": "linear"}]
    assert len({order.settings_sha256 for order in planned.orders}) == 4


def test_an_order_holds_all_that_goes_into_an_item(bank):
    order = Planned(bank).orders[1]
    assert (order.item, order.preset, order.phrase.name) == ("lead.wav", "lead.toml", "line.toml")
    assert order.phrase.data == (bank / "line.toml").read_bytes()
    assert set(order.sources) == {"lead.toml", "line.toml"}


def test_lists_of_notes_count_for_nothing(bank):
    planned = Planned(bank)
    assert (planned.plan.total, planned.outcome.failed) == (2, [])


def test_what_can_not_be_ordered_is_told_with_how_many_items_it_costs(bank):
    lay_preset(bank, "bad.toml", text="[pitch\n")
    lay_preset(bank, "mute.toml", text=(bank / "lead.toml").read_text().partition("[phrase]")[0])
    planned = Planned(bank, vary={"pitch.law": ["rc", "linear"]})
    assert len(planned.items) == 4
    assert [each.preset for each in planned.outcome.failed] == ["bad.toml", "mute.toml"]
    assert "names no phrase" in planned.outcome.failed[1].lines[0]
    assert planned.counted == [2, 0, 2]


def test_a_longer_phrase_than_allowed_is_not_ordered(bank):
    planned = Planned(bank, chosen=(None, None, 0.01))
    assert planned.items == []
    assert "the longest allowed" in planned.outcome.failed[0].lines[0]


def test_names_are_asked_of_the_desk_where_they_count_as_one(bank, monkeypatch):
    lay_preset(bank, "Lead.toml")
    assert Planned(bank).items == ["Lead.wav", "basses/deep.wav", "lead.wav"]
    assert Planned(bank).survey.alike
    monkeypatch.setattr(Desk, "key", lambda desk, item: item.lower())
    planned = Planned(bank)
    assert planned.items == ["Lead.wav", "basses/deep.wav"]
    assert planned.outcome.failed[0].preset == "lead.toml"


def test_a_phrase_for_all_that_is_not_there_stops_the_plan(bank, tmp_path):
    with pytest.raises(PhraseError, match="there is no such file"):
        Planned(bank, [tmp_path / "gone.mid"])


@pytest.mark.parametrize("given", [5, None, b"takes", ["takes"]])
def test_places_that_are_no_paths_are_refused_in_a_line(bank, given):
    for folder, output in ((given, "takes"), (bank, given)):
        with pytest.raises(SettingError, match="give a path"):
            checked_request(folder, output, (), (None, None, 60.0), None, None, ((), ()), Options())
