"""Gain and loop gain of one pair over frequency, as a picture.

The picture is the same, byte for byte, at every run: it holds no date, ids follow from a fixed salt, and the user's own
settings of matplotlib are left out.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from html import escape
from importlib.util import find_spec
from io import BytesIO
from pathlib import Path
from typing import Any

import numpy as np

from gainassay.errors import InputError
from gainassay.explanation import Curves, Explanation, Loop
from gainassay.forms.coefficients import ComplexArray, FloatArray
from gainassay.report.text import quantity
from gainassay.runs import aside

ENDINGS = (".svg", ".png")
SIZE = (8.0, 6.6)
"""Width and height [inch]."""

DOTS_PER_INCH = 150

LOWEST_DB, ROOM_DEG = -60.0, 40.0
"""Where a falling magnitude is left [dB], and what is shown of phase below -180 degrees at least."""

INK, FAINT, GAIN = "#22303c", "#c9d1d8", "#e0902f"
LOOPS = (("#12355b", "solid"), ("#3f7cac", (0, (6, 2))), ("#12355b", (0, (1.5, 1.5))), ("#3f7cac", (0, (6, 2, 1.5, 2))))
"""Colour and dashes of each amplifier's loop gain; told apart in grey, too."""

STYLE: dict[str, Any] = {
    "svg.hashsalt": "gainassay",
    "font.size": 9.5,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.edgecolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.grid": True,
    "grid.color": FAINT,
    "grid.linewidth": 0.5,
    "lines.linewidth": 2.0,
    "legend.frameon": False,
    "axes.axisbelow": True,
}


def check(path: Path) -> None:
    """See that a picture could be drawn and written to a path.

    Raises
    ------
    InputError
        If no picture is written under such a name, there is no such folder, or matplotlib is not installed.
    """
    aside.check(path, ENDINGS)
    if find_spec("matplotlib") is None:
        raise InputError("a plot needs matplotlib, which is not installed; install 'gainassay[plot]'")


def draw(found: Explanation, curves: Curves, path: Path) -> None:
    """Draw gain and loop gain of an explained pair into a file, which appears whole or not at all.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    content = _svg(found, curves) if path.suffix == ".svg" else _png(found, curves)
    with aside.replaced(path) as file:
        file.write_bytes(content)


def _svg(found: Explanation, curves: Curves) -> bytes:
    """The picture as SVG, with a title and a description for those who do not see it."""
    drawn = _rendered(found, curves, "svg", {"Date": None, "Creator": "Gainassay"}).decode()
    opening = drawn.index("<svg ")
    inside = drawn.index(">", opening) + 1
    words = f'<title id="title">{escape(_title(found))}</title><desc id="desc">{escape(_description(found))}</desc>'
    named = drawn[opening : inside - 1] + ' role="img" aria-labelledby="title desc">\n ' + words
    return (drawn[:opening] + named + drawn[inside:]).encode()


def _png(found: Explanation, curves: Curves) -> bytes:
    words = {"Title": _title(found), "Description": _description(found), "Software": None}
    return _rendered(found, curves, "png", words)


def _title(found: Explanation) -> str:
    return f"{found.stage} with {found.part}"


def _description(found: Explanation) -> str:
    """What the picture shows, in words."""
    margins = [
        f"{loop.amplifier}: crossover {quantity(loop.crossover_hz, 'Hz')}, phase margin {loop.phase_margin_deg:.4g} deg"
        for loop in found.stability.loops
        if np.isfinite(loop.phase_margin_deg)
    ]
    return "; ".join(["Gain and loop gain over frequency, magnitude and phase, with the nominal figures", *margins])


def _rendered(found: Explanation, curves: Curves, kind: str, metadata: dict[str, str | None]) -> bytes:
    import matplotlib.style
    from matplotlib.figure import Figure

    with matplotlib.style.context(["default", STYLE]), warnings.catch_warnings():
        # A name may hold signs that the font has not; they are drawn as boxes.
        warnings.filterwarnings("ignore", message="Glyph")
        figure = Figure(figsize=SIZE, layout="constrained")
        size, phase = figure.subplots(2, 1, sharex=True, height_ratios=[5, 4])
        _draw_curves(size, phase, found, curves)
        _draw_margin(size, phase, found, curves)
        _dress(size, phase, found, curves)
        content = BytesIO()
        figure.savefig(content, format=kind, dpi=DOTS_PER_INCH, metadata=metadata)
    return content.getvalue()


def _draw_curves(size: Any, phase: Any, found: Explanation, curves: Curves) -> None:
    several = len(curves.loops) > 1
    drawn: list[tuple[str, ComplexArray, str, Any]] = [
        (f"gain G, over 1 {found.gain_unit}", curves.gain, GAIN, "solid")
    ]
    for place, (name, loop_gain) in enumerate(curves.loops.items()):
        drawn.append((f"loop gain T of {name}" if several else "loop gain T", loop_gain, *LOOPS[place % len(LOOPS)]))
    for label, values, colour, dashes in drawn:
        size.plot(curves.hertz, decibel(values), color=colour, linestyle=dashes, label=label)
        phase.plot(curves.hertz, degrees(values), color=colour, linestyle=dashes)


def decibel(values: ComplexArray) -> FloatArray:
    """Magnitude in dB; nan where there is none."""
    with np.errstate(divide="ignore", invalid="ignore"):
        found = 20.0 * np.log10(np.abs(values))
    return np.where(np.isfinite(found), found, np.nan)


def degrees(values: ComplexArray) -> FloatArray:
    """Phase without jumps, from the lowest frequency on."""
    return np.asarray(np.degrees(np.unwrap(np.angle(values))))


def _draw_margin(size: Any, phase: Any, found: Explanation, curves: Curves) -> None:
    """Mark the crossover with the smallest phase margin, and that margin."""
    phase.axhline(-180.0, color=INK, linewidth=0.8, linestyle=(0, (4, 3)))
    size.axhline(0.0, color=INK, linewidth=0.8, linestyle=(0, (4, 3)))
    loop = _least_stable(found.stability.loops)
    if loop is None:
        return
    at, margin = loop.crossover_hz, loop.phase_margin_deg
    for axes, height in ((size, 0.0), (phase, margin - 180.0)):
        axes.axvline(at, color=INK, linewidth=0.8, linestyle=(0, (1, 2)))
        axes.plot([at], [height], "o", color=INK, markersize=5)
    arrow = {"arrowstyle": "<->", "color": INK, "shrinkA": 0, "shrinkB": 0}
    phase.annotate("", (at, -180.0), (at, margin - 180.0), arrowprops=arrow)
    of = f" of {loop.amplifier}" if len(curves.loops) > 1 else ""
    _say(size, f"crossover{of} {quantity(float(f'{at:.4g}'), 'Hz')}", (at, 0.0), below=True)
    _say(phase, f"phase margin{of} {margin:.3g} deg", (at, -180.0), below=margin > 0.0)


def _say(axes: Any, words: str, at: tuple[float, float], below: bool) -> None:
    """Words left of a point, where a falling curve leaves room for them."""
    axes.annotate(
        words,
        at,
        xytext=(-7, -7 if below else 7),
        textcoords="offset points",
        ha="right",
        va="top" if below else "bottom",
        fontweight="bold",
    )


def _least_stable(loops: Sequence[Loop]) -> Loop | None:
    crossing = [loop for loop in loops if np.isfinite(loop.crossover_hz)]
    return min(crossing, key=lambda loop: loop.phase_margin_deg, default=None)


def _dress(size: Any, phase: Any, found: Explanation, curves: Curves) -> None:
    """Axes, units, title and legend."""
    from matplotlib.ticker import EngFormatter, LogLocator, MultipleLocator, NullLocator

    size.set_title(_title(found), loc="left", fontsize=13, fontweight="bold", pad=21, parse_math=False)
    size.text(0.0, 1.02, _subtitle(found), transform=size.transAxes, color=INK, parse_math=False)
    size.set_ylabel("magnitude [dB]")
    phase.set_ylabel("phase [deg]")
    phase.set_xlabel("frequency")
    phase.set_xscale("log")
    phase.set_xlim(curves.hertz[0], curves.hertz[-1])
    phase.xaxis.set_major_locator(LogLocator(10.0, numticks=13))
    phase.xaxis.set_minor_locator(NullLocator())
    phase.xaxis.set_major_formatter(EngFormatter(unit="Hz", places=0))
    size.yaxis.set_major_locator(MultipleLocator(20.0))
    phase.yaxis.set_major_locator(MultipleLocator(45.0))
    size.set_ylim(*_range_shown([decibel(values) for values in (curves.gain, *curves.loops.values())]))
    phase.set_ylim(bottom=min(phase.get_ylim()[0], -180.0 - ROOM_DEG))
    size.legend(loc="lower left")


def _range_shown(of_curves: Sequence[FloatArray]) -> tuple[float, float]:
    """Magnitudes to show [dB]: all that is high, what is low as far as it tells something, and the legend."""
    highest, lowest = (float(of([of(curve) for curve in of_curves])) for of in (np.nanmax, np.nanmin))
    weakest = min(float(np.nanmax(curve)) for curve in of_curves)
    top = max(highest, 0.0) + 5.0
    return min(max(lowest, LOWEST_DB), weakest - 20.0, -0.35 * top), top


def _subtitle(found: Explanation) -> str:
    of = found.stability
    pole = "" if not np.isfinite(of.second_pole_hz) else f", second pole {quantity(of.second_pole_hz, 'Hz')}"
    return f"{found.topology}, nominal figures: gain-bandwidth product {quantity(of.gbw_hz, 'Hz')}{pole}"
