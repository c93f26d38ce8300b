"""The picture: that it shows the courses and the facts, that it can be read, and that its file is whole."""

import os
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from glidesmith import OutputError, SettingError, __version__
from glidesmith.course import pitch_course
from glidesmith.measuring import measure
from glidesmith.plot import PICTURES, _Curves, _draw, plot
from glidesmith.program import pitch_changes, slew_of
from glidesmith.units import parse_note
from making import make_phrase, make_preset, random_phrase

PHRASE = make_phrase(
    ("0", "0.5", 50), ("0.4", "1", 57), ("1", "1.1", 52), ("1.1", "2.5", 64), title="Ferry line"
)
ENVELOPE = {"attack": 0.05, "decay": 0.2, "sustain": 0.6, "release": 0.3}
DECIBEL = {"law": "decibel", "range_db": 40.0}


def drawn(preset, phrase=PHRASE, tolerance_cents=5.0):
    """The figure's two panels, laid out."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    curves = _Curves(preset, phrase)
    figure = Figure((curves.width, 6.6), layout="constrained")
    FigureCanvasAgg(figure)
    _draw(figure, curves, measure(preset, phrase, tolerance_cents))
    figure.canvas.draw()
    return figure


def lines_of(axes):
    return {line.get_label(): line.get_xydata().T for line in axes.get_lines()}


def marks_of(axes):
    return {m.get_label(): np.asarray(m.get_offsets()) for m in axes.collections if "land" in m.get_label()}


def svg_texts(path):
    return [
        "".join(node.itertext()) for node in ElementTree.parse(path).iter("{http://www.w3.org/2000/svg}text")
    ]


def test_the_pitch_panel_shows_target_pitch_landings_and_what_never_lands():
    preset = make_preset()
    pitch = drawn(preset).axes[0]
    times, numbers = lines_of(pitch)["target"]
    assert times[:6].tolist() == [0.0, 0.4, 0.4, 1.0, 1.0, 1.1]
    assert numbers.tolist() == [50, 50, 57, 57, 52, 52, 64, 64]
    times, numbers = lines_of(pitch)["pitch as heard"]
    course = pitch_course(slew_of(preset.pitch.slew), pitch_changes(preset, PHRASE))
    assert numbers == pytest.approx(60 + 12 * course.at(times), abs=1e-9)
    # rc: 57 is reached from 50 to 5 cents after 0.06 ln 140 s, as is 64; 52 is cut off at 1.1 s
    marks = marks_of(pitch)
    assert marks["lands"][0] == pytest.approx([0.4 + 0.06 * np.log(140), 56.95], abs=1e-6)
    assert marks["never lands"] == pytest.approx(np.array([[1.1, 52 + 5 * np.exp(-0.1 / 0.09)]]), abs=1e-2)


def test_a_jump_is_marked_where_it_lands_and_the_last_glide_where_the_phrase_ends():
    phrase = make_phrase((0, 1, 60), (1, 2, 64), ("1.9", "2.1", 67))
    marks = marks_of(
        drawn(make_preset(pitch={"law": "linear", "rise": 2.0, "glide": "overlap"}), phrase).axes[0]
    )
    assert marks["lands"].tolist() == [[1.0, 64.0]]
    assert marks["never lands"] == pytest.approx(np.array([[2.1, 64 + 0.2 * 12 / 2.0]]))


def test_steps_stand_upright_where_the_glide_crosses_between_them():
    """linear, 1.2 s an octave, semitone steps: they are taken at 0.05 s and then every 0.1 s."""
    preset = make_preset(pitch={"law": "linear", "rise": 1.2, "steps_per_octave": 12})
    times, numbers = lines_of(drawn(preset, make_phrase((0, 1, 60), (1, 4, 72))).axes[0])["pitch as heard"]
    jumps = np.flatnonzero(np.diff(numbers) != 0)
    assert (np.diff(times)[jumps] == 0.0).all()
    assert times[jumps] == pytest.approx(1.05 + 0.1 * np.arange(12))
    assert numbers[jumps + 1] == pytest.approx(np.arange(61, 73))


def test_the_band_has_the_width_of_the_tolerance():
    pitch = drawn(make_preset(), tolerance_cents=20.0).axes[0]
    band = next(c for c in pitch.collections if c.get_label() == "within 20 cents of the target")
    heights = band.get_paths()[0].vertices[:, 1]
    assert heights.min() == pytest.approx(49.8)
    assert heights.max() == pytest.approx(64.2)


def test_the_gain_panel_shows_gate_envelope_control_and_gain():
    gain = drawn(make_preset(envelope=ENVELOPE, gain={"law": "rc", "rise": 0.01}, amplifier=DECIBEL)).axes[1]
    lines = lines_of(gain)
    assert set(lines) == {"envelope", "slewed control", "gain"}
    assert lines["envelope"][1].max() == 1.0
    assert lines["slewed control"][1].max() < 1.0
    assert lines["gain"][1] == pytest.approx((100 ** lines["slewed control"][1] - 1) / 99, abs=1e-9)
    gate = next(c for c in gain.collections if c.get_label() == "gate").get_paths()[0].vertices
    assert gate[:, 1].max() == 1.0
    plain = drawn(make_preset()).axes[1]
    assert list(lines_of(plain)) == ["gain, the same as the slewed control"]


def test_lines_differ_without_colour_and_marks_in_shape():
    pitch, gain = drawn(make_preset(envelope=ENVELOPE, amplifier=DECIBEL)).axes
    for axes in (pitch, gain):
        dashes = [str(line.get_linestyle()) + str(line._unscaled_dash_pattern) for line in axes.get_lines()]
        assert len(set(dashes)) == len(dashes)
    shapes = [m.get_paths()[0].vertices.shape for m in pitch.collections if "land" in m.get_label()]
    assert len(set(shapes)) == 2


def test_colours_are_those_of_okabe_and_ito_beside_black_and_greys():
    """Okabe and Ito, Color Universal Design (2008): the eight colours, as widely printed in hexadecimal."""
    from matplotlib.colors import to_hex

    palette = {"#000000", "#e69f00", "#56b4e9", "#009e73", "#f0e442", "#0072b2", "#d55e00", "#cc79a7"}
    for axes in drawn(make_preset(envelope=ENVELOPE, amplifier=DECIBEL)).axes:
        colours = {to_hex(line.get_color()) for line in axes.get_lines()}
        colours |= {to_hex(c.get_facecolor()[0]) for c in axes.collections}
        assert colours - {"#e3e3e3"} <= palette


@pytest.mark.parametrize(
    "phrase", [PHRASE, random_phrase(30, 4), make_phrase((0, "0.1", 60))], ids=["short", "long", "one"]
)
def test_nothing_covers_the_data_and_note_names_have_room(phrase):
    figure = drawn(make_preset(title="A long title " * 5, envelope=ENVELOPE, amplifier=DECIBEL), phrase)
    pitch, gain = figure.axes
    title = figure._suptitle.get_window_extent()
    for axes in (pitch, gain):
        legend, panel = axes.get_legend().get_window_extent(), axes.get_window_extent()
        assert legend.y0 >= panel.y1 - 1.0
        assert legend.x1 <= figure.bbox.x1
    assert pitch.get_legend().get_window_extent().y0 > panel.y1
    assert title.y0 >= pitch.get_legend().get_window_extent().y1 - 1.0
    assert title.x1 <= figure.bbox.x1
    labels = [t.get_window_extent() for t in pitch.get_yticklabels()]
    assert 2 <= len(labels) <= 12
    assert all(upper.y0 > lower.y1 for lower, upper in pairwise(labels))
    assert pitch.get_xlim() == gain.get_xlim()


@pytest.mark.parametrize(("low", "high"), [(0, 127), (60, 61), (59, 66), (40, 88)])
def test_note_names_beside_the_axis_are_right_and_few(low, high):
    pitch = drawn(make_preset(), make_phrase((0, 1, low), (1, 2, high))).axes[0]
    texts = [label.get_text() for label in pitch.get_yticklabels()]
    names = dict(zip(pitch.get_yticks().tolist(), texts, strict=True))
    assert 2 <= len(names) <= 11
    assert all(parse_note(name) == number for number, name in names.items())


def test_a_long_phrase_is_wide_but_not_without_end():
    assert drawn(make_preset()).get_size_inches()[0] == 10.0
    assert drawn(make_preset(), random_phrase(20, 1)).get_size_inches()[0] == pytest.approx(24, abs=2)
    assert drawn(make_preset(), random_phrase(120, 1)).get_size_inches()[0] == 40.0


def test_an_svg_is_the_same_every_time_and_its_text_is_text(tmp_path):
    preset = make_preset(title="Cost $x^2$ <b> & \x1b[31m\n")
    one, two = tmp_path / "one.svg", tmp_path / "two.SVG"
    plot(preset, PHRASE, one)
    plot(preset, PHRASE, two)
    assert one.read_bytes() == two.read_bytes()
    texts = svg_texts(one)
    assert r"Cost $x^2$ <b> & \x1b[31m\n, playing Ferry line" in texts
    assert {"target", "pitch as heard", "lands", "never lands", "gate"} <= set(texts)
    assert b"dc:date" not in one.read_bytes()


def test_a_png_has_the_pictures_size_and_is_the_same_every_time(tmp_path):
    plot(make_preset(), PHRASE, tmp_path / "one.png")
    plot(make_preset(), PHRASE, str(tmp_path / "two.png"))
    data = (tmp_path / "one.png").read_bytes()
    assert data == (tmp_path / "two.png").read_bytes()
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    assert [int.from_bytes(data[a : a + 4], "big") for a in (16, 20)] == [1100, 726]


def test_a_title_that_the_font_lacks_is_drawn_without_a_warning(tmp_path):
    plot(make_preset(title="夜のフェリー 🚢"), PHRASE, tmp_path / "ferry.png")
    plot(make_preset(title="夜のフェリー 🚢"), PHRASE, tmp_path / "ferry.svg")
    assert any("夜のフェリー 🚢" in text for text in svg_texts(tmp_path / "ferry.svg"))


@pytest.mark.parametrize("name", ["plot.pdf", "plot", "plot.svg.txt", "\x1b[31m.jpg"])
def test_another_kind_of_file_is_told_in_one_line(tmp_path, name):
    with pytest.raises(SettingError, match=r"name it \.svg or \.png") as caught:
        plot(make_preset(), PHRASE, tmp_path / name)
    assert len(caught.value.lines) == 1
    assert str(caught.value).isprintable()
    assert list(tmp_path.iterdir()) == []


def test_where_it_can_not_be_written_nothing_is_touched(tmp_path):
    with pytest.raises(OutputError):
        plot(make_preset(), PHRASE, tmp_path / "nowhere" / "plot.svg")
    (tmp_path / "folder.svg").mkdir()
    with pytest.raises(OutputError):
        plot(make_preset(), PHRASE, tmp_path / "folder.svg")
    kept = tmp_path / "kept.svg"
    kept.write_text("mine")
    with pytest.raises(SettingError, match="tolerance"):
        plot(make_preset(), PHRASE, kept, 0.0)
    assert kept.read_text() == "mine"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["folder.svg", "kept.svg"]


def test_the_readers_own_drawing_settings_have_no_part_in_it_and_are_left_alone(tmp_path):
    import matplotlib

    plot(make_preset(), PHRASE, tmp_path / "plain.svg")
    with matplotlib.rc_context({"axes.facecolor": "black", "font.size": 30, "svg.fonttype": "path"}):
        plot(make_preset(), PHRASE, tmp_path / "styled.svg")
        assert matplotlib.rcParams["font.size"] == 30
    assert (tmp_path / "plain.svg").read_bytes() == (tmp_path / "styled.svg").read_bytes()


def test_no_window_and_no_drawing_library_before_it_is_needed(tmp_path):
    code = (
        "import sys, glidesmith.plot, glidesmith.measuring\n"
        "assert 'matplotlib' not in sys.modules\n"
        "from making import make_phrase, make_preset\n"
        f"glidesmith.plot.plot(make_preset(), make_phrase((0, 1, 60)), {str(tmp_path / 'a.svg')!r})\n"
        "assert 'matplotlib.pyplot' not in sys.modules\n"
    )
    command, folder = [sys.executable, "-c", code], Path(__file__).parent
    run = subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=300)
    assert run.returncode == 0, run.stderr
    assert run.stderr == ""
    assert PICTURES == (".svg", ".png")


def test_the_librarys_folder_is_named_for_it_alone_and_its_remarks_are_kept_back(tmp_path):
    """In a process of its own, since the library looks once."""
    code = f"""
import logging, os
from pathlib import Path
from glidesmith import compiled, plot
compiled.CACHE_FOLDER = {str(tmp_path / "cache" / "digest")!r}
Path(compiled.CACHE_FOLDER).mkdir(parents=True)
level = logging.getLogger("matplotlib").level
with plot._quiet_library():
    import matplotlib
    print(matplotlib.get_configdir())
    logging.getLogger("matplotlib.font_manager").warning("a remark")
print("MPLCONFIGDIR" in os.environ, logging.getLogger("matplotlib").level == level)
"""
    environment = {name: value for name, value in os.environ.items() if name != "MPLCONFIGDIR"}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment)
    assert done.stderr == ""
    assert done.stdout.split() == [str(tmp_path / "cache" / "drawing"), "False", "True"]


def test_pictures_say_what_made_them_and_name_no_library(tmp_path):
    plot(make_preset(), PHRASE, tmp_path / "lead.svg")
    plot(make_preset(), PHRASE, tmp_path / "lead.png")
    about = (tmp_path / "lead.svg").read_bytes().partition(b"</metadata>")[0]
    assert f"<dc:title>Glidesmith {__version__}</dc:title>".encode() in about
    assert b"matplotlib" not in about.lower()
    head = (tmp_path / "lead.png").read_bytes()[:200]
    assert f"Software\0Glidesmith {__version__}".encode() in head
