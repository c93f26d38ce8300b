"""Draws shared/pictures/laws.svg, the README's picture of the seven laws: python tests/draw_laws.py"""

from pathlib import Path

import numpy as np
from matplotlib import rc_context
from matplotlib.figure import Figure
from matplotlib.patheffects import withStroke

from glidesmith import Slew

PICTURE = Path(__file__).resolve().parent.parent / "shared" / "pictures" / "laws.svg"
SAMPLE_RATE = 2000

# Colours that colour-blind people can tell apart: Okabe and Ito (2008), "Color universal design". Dashes tell
# them apart too.
LAWS = (
    ("linear", {}, "#000000", "-"),
    ("rc", {}, "#0072B2", "-"),
    ("log", {"bend": 1.5}, "#009E73", (0, (5, 1.5))),
    ("exp", {"bend": 1.5}, "#D55E00", (0, (5, 1.5))),
    ("soft", {"knee": 0.25}, "#CC79A7", "-"),
    ("curve", {"curvature": -4.0}, "#E69F00", (0, (1.5, 1.5))),
    ("cosine", {}, "#56B4E9", (0, (1.5, 1.5))),
)
PLACES = {  # where each name stands, up and down: seconds and octaves
    "linear": ((0.60, 0.84), (0.70, 0.36)),
    "rc": ((1.72, 0.77), (1.25, 0.33)),
    "log": ((1.02, 0.55), (1.25, 0.72)),
    "exp": ((0.27, 0.84), (0.10, 0.25)),
    "soft": ((1.30, 0.90), (1.30, 0.10)),
    "curve": ((0.88, 0.30), (0.72, 0.92)),
    "cosine": ((0.33, 0.09), (0.60, 0.07)),
}


def draw() -> Figure:
    """An octave up and an octave down under each law, T = 1 s on both sides."""
    figure = Figure(figsize=(10, 4.2), layout="constrained")
    for side, axes in enumerate(figure.subplots(1, 2, sharey=True)):
        origin, target = (0.0, 1.0) if side == 0 else (1.0, 0.0)
        time = np.arange(2 * SAMPLE_RATE + 1) / SAMPLE_RATE
        axes.axhline(target, color="#888888", linewidth=0.8)
        for law, more, colour, dashes in LAWS:
            y = Slew(law, 1.0, 1.0, **more).run(np.full(time.size, target), SAMPLE_RATE, start=origin)
            axes.plot(time, y, color=colour, linestyle=dashes, linewidth=1.8)
            name = axes.annotate(
                law, PLACES[law][side], color=colour, fontsize=10, fontweight="bold", zorder=5
            )
            name.set_path_effects([withStroke(linewidth=3, foreground="white")])
        axes.set_title("an octave up" if side == 0 else "an octave down", fontsize=11)
        axes.set_xlabel("time in units of T")
        axes.set_xlim(0, 2)
        axes.set_ylim(-0.03, 1.05)
        axes.grid(color="#dddddd", linewidth=0.6)
        axes.spines[["top", "right"]].set_visible(False)
    figure.axes[0].set_ylabel("volts (octaves)")
    return figure


def write(path: Path) -> None:
    """Write the picture; the same bytes for the same version of matplotlib."""
    with rc_context({"svg.hashsalt": "glidesmith", "svg.fonttype": "none", "font.family": "sans-serif"}):
        figure = draw()
        figure.savefig(path, metadata={"Date": None} if path.suffix == ".svg" else None, dpi=100)


if __name__ == "__main__":
    write(PICTURE)
