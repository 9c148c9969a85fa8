"""Every form against an independent solve at 60 digits: the error and its account, not only the gain."""

from __future__ import annotations

import random
from collections.abc import Mapping, Sequence

import mpmath
import numpy as np
import pytest

import oracle
from forms import networks
from gainassay.errors import InputError
from gainassay.forms import soundness
from gainassay.forms.cache import form_of
from gainassay.forms.departures import BASIC, DEPARTURES
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen.boxes import with_tolerances
from gainassay.screen.corners import PartSide, active_sets, monomials, stage_side
from gainassay.screen.kernel import nominal_account, screen
from gainassay.screen.signs import reach

POINTS = 200
FEW = 60
"""Points of forms with all departures, which are larger."""

LIBRARY = library()


def departures_of(form: Form, part: oracle.Part) -> list[float]:
    """The departures of one part in all amplifiers, in the order of the form's."""
    c = 1.0 / part.cmrr
    known = {"a": 1.0 / part.a_ol, "g_id": 1.0 / part.r_id, "r_o": part.r_o}
    known |= {"g_icp": 1.0 / part.r_icp, "g_icn": 1.0 / part.r_icn, "c_pos": max(c, 0.0), "c_neg": max(-c, 0.0)}
    return [known[symbol] for _, symbol in form.departures]


def account(
    form: Form, ohms: Sequence[Mapping[str, float]], parts: Sequence[oracle.Part]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """E and its terms, shape (terms, points), of stage i with part i, as the screen computes them; and G_ideal."""
    values = np.array([[point[name] for point in ohms] for name in form.elements])
    none = np.full(len(ohms), np.nan)
    box = with_tolerances(values, np.zeros_like(values), np.ones(len(ohms)), none)
    # Corners are not asked for here: with ideal parts there are few.
    stages = stage_side(form, box, reach(form, np.zeros((len(DEPARTURES), 1))))
    departures = np.array([departures_of(form, part) for part in parts]).T
    evidence = np.zeros((len(DEPARTURES), len(parts)), np.uint8)
    side = PartSide(monomials(form, departures), monomials(form, departures), departures, evidence)
    outcome = screen(stages, side, active_sets(form))
    diagonal = np.arange(len(ohms))
    terms = np.array([term[diagonal, diagonal] for term in nominal_account(stages, side)])
    return outcome.error_nominal[diagonal, diagonal], terms, stages.gain_ideal


@pytest.mark.oracle
@pytest.mark.parametrize("topology", [*LIBRARY.values(), *networks.UNSEEN.values()], ids=[*LIBRARY, *networks.UNSEEN])
@pytest.mark.parametrize("with_common_mode", [False, True], ids=["basic", "all departures"])
def test_error_and_account(topology: Topology, with_common_mode: bool) -> None:
    rng = random.Random(topology.content_hash())
    form = form_of(topology, DEPARTURES if with_common_mode else BASIC)
    ohms = [oracle.random_ohms(topology, rng) for _ in range(POINTS)]
    parts = [oracle.random_part(rng) for _ in range(POINTS)]
    if with_common_mode:
        ohms, parts = ohms[:FEW], [oracle.random_common_mode(rng, part) for part in parts[:FEW]]
    errors, terms, gain_ideal = account(form, ohms, parts)
    if with_common_mode:
        assert np.isfinite(errors).mean() > 0.5 or not gain_ideal.any()
    for i in range(len(parts)):
        with mpmath.workdps(oracle.DIGITS):
            ideal = oracle.gain(topology, ohms[i], oracle.IDEAL)
            error = oracle.gain(topology, ohms[i], parts[i]) / ideal - 1 if ideal else mpmath.mpf(0)
        if ideal == 0:
            assert gain_ideal[i] == 0
            continue
        size = np.abs(terms[:, i]).sum()
        assert abs(gain_ideal[i] - float(ideal)) <= 1e-12 * abs(float(ideal)), (ohms[i], parts[i])
        if np.isnan(errors[i]):
            # Positive feedback, which a poor CMRR may bring about, too: no number is claimed.
            may_be_positive = any(soundness.sign(form.loadings[place]) != 1 for place in form.loops())
            assert with_common_mode or may_be_positive, (ohms[i], parts[i])
            continue
        assert abs(errors[i] - float(error)) <= 1e-9 * size, (ohms[i], parts[i])
        assert abs(terms[:, i].sum() - errors[i]) <= 1e-12 * size, (ohms[i], parts[i])


def random_network(rng: random.Random) -> Topology:
    """Two to seven nodes, one or two amplifiers, resistors anywhere; many make no sense, and say so."""
    nodes = ["in", "out", *(f"n{i}" for i in range(rng.randint(0, 4)))]
    pairs = [(a, b) for i, a in enumerate([*nodes, "ground"]) for b in [*nodes, "ground"][i + 1 :]]
    chosen = rng.sample(pairs, min(len(pairs), rng.randint(2, 8)))
    amplifiers = [(rng.choice(["ground", *nodes]), rng.choice(nodes), "out")]
    if "n1" in nodes and rng.random() < 0.4:
        amplifiers.append((rng.choice(["ground", *nodes]), rng.choice(nodes), "n1"))
    return oracle.network({f"r{i}": pair for i, pair in enumerate(chosen)}, amplifiers)


@pytest.mark.oracle
def test_random_networks() -> None:
    rng = random.Random(20261201)
    derived = 0
    for _ in range(600):
        topology = random_network(rng)
        try:
            form = derive(topology)
        except InputError:
            continue
        ohms = [oracle.random_ohms(topology, rng, 10.0, 1e6) for _ in range(3)]
        parts = [oracle.random_part(rng) for _ in range(3)]
        errors, terms, _ = account(form, ohms, parts)
        derived += 1
        for i in range(3):
            if not np.isfinite(errors[i]):
                continue
            with mpmath.workdps(oracle.DIGITS):
                ideal = oracle.gain(topology, ohms[i], oracle.IDEAL)
                error = float(oracle.gain(topology, ohms[i], parts[i]) / ideal - 1)
            assert abs(errors[i] - error) <= 1e-9 * np.abs(terms[:, i]).sum(), (topology, ohms[i], parts[i])
    assert derived > 60
