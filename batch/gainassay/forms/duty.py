"""What a topology asks of its amplifiers beside accuracy, derived once: voltages, currents and feedback.

With ideal amplifiers each one's output voltage, output current and input voltage stands in a fixed ratio to the stage's
output voltage, all from the same nodal equations. The current flows into load, feedback network and whatever else hangs
at an output; nothing is said of any particular circuit.

One part serves in all places of a stage. With its open-loop gain A and the matrix beta of feedback factors (receiving x
sending amplifier) the stage's loops are therefore 1 + A lambda, lambda being the eigenvalues of beta, and 1/lambda is
the noise gain of a loop.
"""

from __future__ import annotations

from dataclasses import dataclass

from gainassay.forms import nodal
from gainassay.forms.form import Ratio, Ratios
from gainassay.forms.multiaffine import MultiAffine
from gainassay.forms.nodal import Operation
from gainassay.forms.topology import Topology, driven_by_voltage


@dataclass(frozen=True)
class Work:
    """What each amplifier does for 1 V somewhere.

    Attributes
    ----------
    v_out, i_out, v_in : tuple[Ratio, ...]
        Output voltage [V/V], current out of the output [A/V], and voltage of both inputs [V/V].
    """

    v_out: tuple[Ratio, ...]
    i_out: tuple[Ratio, ...]
    v_in: tuple[Ratio, ...]


@dataclass(frozen=True)
class Duty:
    """What a topology asks of its amplifiers.

    Attributes
    ----------
    amplifiers : tuple[str, ...]
        Their names.
    of_signal : Work
        For 1 V of signal at the stage's output, across the element where that is a current.
    of_bias : Work or None
        For 1 V at the input, at both nodes of a pair; none if the input is a current.
    feedback : tuple[tuple[Ratio, ...], ...]
        Feedback factors [V/V], by receiving, then by sending amplifier: what 1 V at the output of the one brings to
        v- less v+ of the other.
    """

    amplifiers: tuple[str, ...]
    of_signal: Work
    of_bias: Work | None
    feedback: tuple[tuple[Ratio, ...], ...]


def derive(topology: Topology) -> Duty:
    """What a topology that has a form asks of its amplifiers."""
    ratios = Ratios(tuple(element.name for element in topology.elements))
    brought, whole = nodal.feedback(topology)
    signal = nodal.operation(topology)
    bias = nodal.operation(topology, common=True) if driven_by_voltage(topology) else None
    return Duty(
        amplifiers=tuple(amplifier.name for amplifier in topology.amplifiers),
        of_signal=_work(ratios, signal, signal.output),
        of_bias=_work(ratios, bias, bias.whole) if bias else None,
        feedback=tuple(tuple(ratios.reduced(numerator, whole) for numerator in row) for row in brought),
    )


def _work(ratios: Ratios, of: Operation, reference: MultiAffine) -> Work:
    v_out, i_out, v_in = (
        tuple(ratios.reduced(numerator, reference) for numerator in numerators)
        for numerators in (of.v_out, of.i_out, of.v_in)
    )
    return Work(v_out, i_out, v_in)
