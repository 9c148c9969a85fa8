"""The operating limits of a part that a stage must keep to, with the columns that each is checked from."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Limit:
    """An operating limit.

    Attributes
    ----------
    name : str
        What results call it, after `limit.`.
    unit : str
        Unit of what is compared, and of its margin.
    stages, parts : tuple[str, ...]
        Columns of the two tables that it is checked from. Where one is blank it is not checked, unless the others prove
        already that it is not kept.
    """

    name: str
    unit: str
    stages: tuple[str, ...]
    parts: tuple[str, ...]


LIMITS = (
    Limit("output_swing", "V", ("v_out_peak", "v_supply"), ("v_swing_headroom_max",)),
    Limit("output_current", "A", ("v_out_peak",), ("i_out_max",)),
    Limit("input_range", "V", ("v_out_peak", "v_supply"), ("v_cm_headroom_low_max", "v_cm_headroom_high_max")),
    Limit("slew_rate", "V/us", ("v_out_peak", "frequency_hz"), ("slew_rate_v_us_min",)),
    Limit("full_power", "V/us", ("v_out_peak", "frequency_hz"), ("full_power_hz_min", "v_full_power_peak")),
    Limit("stable_gain", "V/V", (), ("gain_stable_min",)),
    Limit("supply_range", "V", ("v_supply",), ("v_supply_min", "v_supply_max")),
    Limit("temperature_range", "K", (), ("t_part_min_c", "t_part_max_c")),
)
"""The first that a pair is outside of is the reason of its verdict."""

WITH_A_DEFAULT = ("v_ground", "v_in_dc", "t_min_c", "t_max_c")
"""Columns of the stage table that limits use, too, and whose blanks mean something."""
