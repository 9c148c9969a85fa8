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
from gainassay.forms.topology import Topology


@dataclass(frozen=True)
class Duty:
    """What ideal amplifiers do for 1 V at the output of a stage.

    The stage's output voltage is that across the element where its output is a current.

    Attributes
    ----------
    amplifiers : tuple[str, ...]
        Their names.
    v_out, i_out, v_in : tuple[Ratio, ...]
        Of each amplifier the output voltage [V/V], the current out of the output [A/V] and the voltage of both inputs
        [V/V].
    feedback : tuple[tuple[Ratio, ...], ...]
        Feedback factors [V/V], by receiving, then by sending amplifier: what 1 V at the output of the one brings to
        v- less v+ of the other.
    """

    amplifiers: tuple[str, ...]
    v_out: tuple[Ratio, ...]
    i_out: tuple[Ratio, ...]
    v_in: tuple[Ratio, ...]
    feedback: tuple[tuple[Ratio, ...], ...]


def derive(topology: Topology) -> Duty:
    """What a topology that has a form asks of its amplifiers."""
    ratio = Ratios(tuple(element.name for element in topology.elements))
    found, (brought, whole) = nodal.operation(topology), nodal.feedback(topology)
    v_out, i_out, v_in = (
        tuple(ratio.reduced(numerator, found.output) for numerator in numerators)
        for numerators in (found.v_out, found.i_out, found.v_in)
    )
    return Duty(
        amplifiers=tuple(amplifier.name for amplifier in topology.amplifiers),
        v_out=v_out,
        i_out=i_out,
        v_in=v_in,
        feedback=tuple(tuple(ratio.reduced(numerator, whole) for numerator in row) for row in brought),
    )
