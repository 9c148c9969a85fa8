"""One pair, explained, for a person."""

from __future__ import annotations

import math

from gainassay.cautions import CAUTIONS
from gainassay.explanation import Explanation, LimitCheck, PortFigure, StabilityFigures, ViewFigures
from gainassay.forms.departures import BASIC
from gainassay.report.text import element, ppm, quantity, table

BAR = 24
"""Characters of the longest bar."""


def text(found: Explanation) -> list[str]:
    """The explanation, a section for each question."""
    unit = found.gain_unit
    return [
        f"{found.stage} with {found.part}: {found.verdict}, {found.reason}",
        f"{found.topology}: {found.summary}",
        *(["Calibrated at 25 degrees Celsius: only what moves afterwards counts"] if found.calibrated else []),
        *_frequency(found),
        "",
        *table(
            ["", "", ""],
            [
                ["ideal gain", f"{found.gain_ideal:.9g} {unit}", ""],
                ["target gain", f"{found.target_gain:.9g} {unit}", ""],
                ["nominal gain", _gain(found.gain_nominal, unit), _nominal(found.error_nominal_ppm, " ppm")],
                ["worst case", _gain(found.gain_worst, unit), _error(found.error_worst_ppm)],
                ["limit", "", f"{found.limit_ppm:.6g} ppm"],
                *_phase(found),
                ["limit used", "", "-" if math.isnan(found.limit_used) else f"{found.limit_used:.4g}"],
                ["evidence", found.evidence, found.leans_on],
            ],
        )[1:],
        "",
        "Terms of the error, in ppm",
        *_terms(found),
        "",
        *_both_views(found),
        "",
        "Elements",
        *table(
            ["  element", "nominal", "tolerance", "temperature", "drift", "at the worst corner", ""],
            [
                [
                    f"  {e.name}",
                    element(e.nominal, e.kind),
                    *(f"{spread * 100:.6g} %" if spread else "-" for spread in (e.tolerance, e.temperature, e.drift)),
                    element(e.at_worst, e.kind),
                    f"tracks {e.tracks}" if e.tracks else "",
                ]
                for e in found.elements
            ],
        ),
        "",
        "Part",
        *table(
            ["  quantity", "nominal", "limit taken", "evidence", "at the worst corner", ""],
            [
                [
                    f"  {f.quantity}",
                    quantity(f.nominal, f.unit),
                    quantity(f.worst, f.unit),
                    f.evidence,
                    f.at_worst,
                    "" if f.matters else "does not matter to this stage",
                ]
                for f in found.figures
            ],
        ),
        "",
        "Operating limits, with nominal elements and an ideal op-amp",
        *table(["  limit", "end", "asked", "", "allowed", "margin", ""], [_limit(check) for check in found.limits]),
        "",
        *_ports(found),
        *_stability(found.stability),
        "",
        *CAUTIONS,
    ]


def _frequency(found: Explanation) -> list[str]:
    if math.isnan(found.frequency_hz):
        return []
    hertz = quantity(found.frequency_hz, "Hz")
    return [f"At {hertz}: gains and errors are those of the magnitude; the worst case is a {found.worst_case}"]


def _phase(found: Explanation) -> list[list[str]]:
    if math.isnan(found.frequency_hz):
        return []
    limit = "" if math.isinf(found.phase_accuracy_deg) else f", limit {found.phase_accuracy_deg:.6g} deg"
    error = "-" if math.isnan(found.phase_error_deg) else f"{found.phase_error_deg:+.6g} deg"
    return [["phase error", "", f"{error}{limit}"]]


def _ports(found: Explanation) -> list[str]:
    if not found.ports:
        return []
    rows = [[f"  {p.symbol}", _port(p), p.meaning] for p in found.ports]
    figures = ", ".join(departure.quantity for departure in BASIC)
    header = f"Impedances and loop at 0 Hz, with the nominal figures of {figures}"
    return [header, *table(["", "", ""], rows)[1:], ""]


def _limit(check: LimitCheck) -> list[str]:
    """A comparison as a row; the temperatures themselves stand in degrees Celsius."""
    unit = "C" if check.unit == "K" else check.unit
    asked, allowed = (quantity(value, unit) for value in (check.asked, check.allowed))
    return [f"  {check.name}", check.end, asked, check.bound, allowed, quantity(check.margin, check.unit), check.state]


def _stability(of: StabilityFigures) -> list[str]:
    """Margins of each loop, with the figures that they rest on."""
    if not of.loops:
        return ["Stability", f"  not checked: {of.doubt.partition(': ')[2]}"]
    pole = "not modelled" if math.isinf(of.second_pole_hz) else quantity(of.second_pole_hz, "Hz")
    asked = f"; a pass needs {of.least_deg:g} deg" if of.least_deg is not None else ""
    rows = [
        [
            f"  {loop.amplifier}",
            quantity(loop.crossover_hz, "Hz"),
            _margin(loop.phase_margin_deg, "deg"),
            _margin(loop.gain_margin_db, "dB"),
            f"of {loop.crossovers} crossovers the one with the smallest phase margin" if loop.crossovers > 1 else "",
        ]
        for loop in of.loops
    ]
    return [
        f"Stability, with gbw {quantity(of.gbw_hz, 'Hz')}, second pole {pole} and the nominal figures{asked}",
        *table(["  loop of", "crossover", "phase margin", "gain margin", ""], rows),
        *(["  each amplifier's loop with all others closed"] if len(rows) > 1 else []),
        *([f"  {of.doubt}"] if of.doubt else []),
    ]


def _margin(value: float, unit: str) -> str:
    if math.isinf(value):
        return "none"
    return "-" if math.isnan(value) else f"{value:.4g} {unit}"


def _port(port: PortFigure) -> str:
    if math.isnan(port.value):
        return "-"
    return quantity(port.value, port.unit) if port.unit else f"{port.value:.6g}"


def _gain(value: float, unit: str) -> str:
    return "-" if math.isnan(value) else f"{value:.9g} {unit}"


def _nominal(value: float, unit: str = "") -> str:
    """A nominal error; a dash where there is none."""
    return "-" if math.isnan(value) else f"{ppm(value)}{unit}"


def _error(value: float) -> str:
    return ppm(value) if math.isnan(value) else f"{ppm(value)} ppm"


def _terms(found: Explanation) -> list[str]:
    longest = max((abs(t.worst_ppm) for t in found.terms if not math.isnan(t.worst_ppm)), default=0.0)
    rows = [
        [
            f"  {t.name}",
            _nominal(t.nominal_ppm),
            "-" if math.isnan(t.worst_ppm) else ppm(t.worst_ppm),
            _bar(t.worst_ppm, longest),
        ]
        for t in found.terms
    ]
    rows.append(["  sum", _nominal(found.error_nominal_ppm), ppm(found.error_worst_ppm), ""])
    return table(["  term", "nominal", "worst case", ""], rows, right=[1, 2])


def _both_views(found: Explanation) -> list[str]:
    if found.calibrated:
        return ["Root-sum-square and Monte Carlo are not found for calibrated stages"]
    if not math.isnan(found.frequency_hz):
        return ["Root-sum-square and Monte Carlo are not found at a frequency"]
    if math.isnan(found.error_worst_ppm):
        return ["Root-sum-square and Monte Carlo are not found where the gain has no finite bound"]
    return [
        "Two more views, every quantity independent of the others and rectangular between its ends; errors in ppm",
        *_views(found.views),
        *_shares(found.views),
    ]


def _views(views: ViewFigures) -> list[str]:
    return table(
        ["  view", "mean", "u", f"mean and {views.coverage_factor:g} u", "inside the limit", ""],
        [
            [
                "  root-sum-square",
                _nominal(views.mean_ppm),
                _nominal(views.u_ppm).lstrip("+"),
                _nominal(views.stated_ppm),
                _percent(views.inside),
                "if normally distributed",
            ],
            [
                "  Monte Carlo",
                _nominal(views.sampled_mean_ppm),
                _nominal(views.sampled_u_ppm).lstrip("+"),
                "",
                _percent(views.yield_mc),
                f"+/- {_percent(views.yield_mc_u)} from {views.samples:,} samples"
                if views.yield_mc_u
                else "since the worst case is",
            ],
        ],
        right=[1, 2, 3, 4],
    )


def _shares(views: ViewFigures) -> list[str]:
    if not views.shares:
        return []
    rows = [
        [
            f"  {s.name}",
            f"{s.half_width * 100:.4g} %",
            f"{s.sensitivity:.4g}",
            ppm(s.u_ppm).lstrip("+"),
            _percent(s.share),
        ]
        for s in views.shares
    ]
    header = ["  quantity", "half width", "sensitivity", "its u", "share of u^2"]
    return ["", *table(header, rows, right=[1, 2, 3, 4])]


def _percent(share: float) -> str:
    return "-" if math.isnan(share) else f"{share * 100:.2f} %"


def _bar(value: float, longest: float) -> str:
    return "" if math.isnan(value) or not longest else "#" * round(BAR * abs(value) / longest)
