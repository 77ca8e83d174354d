"""Copper against wire tables, standards and quoted minima; the source stands beside each number."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.physics import ampacity, copper

FOOT_M = 0.3048


def wire_section_m2(gauge: int) -> float:
    """American wire gauge: 0.127 mm x 92^((36 - n)/39) (the gauge's definition, ASTM B258)."""
    diameter_m = 0.127e-3 * 92.0 ** ((36 - gauge) / 39)
    return float(np.pi / 4 * diameter_m**2)


@pytest.mark.parametrize(
    ("gauge", "cold_ohm", "hot_ohm"),
    [(10, 0.9989, 1.21), (12, 1.588, 1.93), (14, 2.525, 3.07), (18, 6.385, 7.77)],
)
def test_wire_table(gauge: int, cold_ohm: float, hot_ohm: float) -> None:
    # ohm per 1000 ft at 20 degC: HyperPhysics after Floyd; at 75 degC: NEC chapter 9 table 8
    resistance = copper.conductor_resistance_ohm(
        1000 * FOOT_M, wire_section_m2(gauge), np.array([20.0, 75.0])
    )
    assert resistance == pytest.approx(np.array([cold_ohm, hot_ohm]), rel=5e-3)


@pytest.mark.parametrize(
    ("section_mm2", "largest_ohm_per_km"),
    [(0.5, 36.0), (1.0, 18.1), (2.5, 7.41), (10.0, 1.83), (50.0, 0.387)],
)
def test_iec_60228_maximum(section_mm2: float, largest_ohm_per_km: float) -> None:
    # IEC 60228 permits a conductor of the nominal section at most this resistance; the gap is its tolerance
    per_km = copper.conductor_resistance_ohm(1000.0, section_mm2 * 1e-6, 20.0)
    assert 0.88 * largest_ohm_per_km < per_km < largest_ohm_per_km


def test_annealed_copper() -> None:
    # IEC 60028, NBS Handbook 100: 1.7241e-8 ohm m at 20 degC, 0.00393 per kelvin
    assert copper.resistivity_ohm_m(20.0) / 1.7241e-8 == pytest.approx(1.0, rel=1e-6)
    assert copper.resistivity_ohm_m(70.0) / copper.resistivity_ohm_m(20.0) == pytest.approx(1.1965, rel=1e-4)


def test_one_ounce_is_34_3_um_and_half_a_milliohm() -> None:
    # 305.15 g/m2 at 8.89 g/cm3 (IEC 60028): 34.3 um; half a milliohm a square is common practice
    assert copper.foil_thickness_m(1.0) * 1e6 == pytest.approx(34.3, rel=2e-3)
    assert copper.sheet_resistance_ohm(copper.foil_thickness_m(1.0), 20.0) == pytest.approx(0.5e-3, rel=1e-2)


@pytest.mark.parametrize(
    ("weight_oz", "allowance_um", "inner_um", "added_um", "outer_um"),
    [(0.5, 4.0, 11.4, 18.0, 33.4), (1.0, 6.0, 24.9, 17.0, 47.9), (2.0, 6.0, 55.7, 17.0, 78.7)],
)
def test_finished_thickness(
    weight_oz: float, allowance_um: float, inner_um: float, added_um: float, outer_um: float
) -> None:
    # IPC-6012 minima as board makers quote them: nine tenths of the foil, less what processing takes (inner),
    # plus 20 um of plating less 2 or 3 um of processing (outer, class 2)
    least_um = 0.9 * copper.foil_thickness_m(weight_oz) * 1e6
    assert least_um - allowance_um == pytest.approx(inner_um, rel=6e-3)
    assert least_um + added_um == pytest.approx(outer_um, rel=3e-3)


def test_trace_of_100_mm() -> None:
    # seen printed as 98.3 mohm with 1.72e-8 ohm m; with IEC 60028 it is 98.5 mohm
    assert copper.trace_resistance_ohm(0.1, 0.5e-3, 35e-6, 20.0) == pytest.approx(98.5e-3, rel=5e-4)


def test_via_barrel() -> None:
    # 1.6 mm long, 0.3 mm, 25 um: 1.17 mohm printed for a thin wall, its diameter that of the wall's middle;
    # drilled to 0.3 mm the ring is smaller by the wall and the resistance 9 % more (closed form)
    middle = copper.via_resistance_ohm(1.6e-3, 0.325e-3, 25e-6, 20.0)
    drilled = copper.via_resistance_ohm(1.6e-3, 0.3e-3, 25e-6, 20.0)
    assert middle == pytest.approx(1.17e-3, rel=2e-3)
    assert drilled / middle == pytest.approx(0.3 / 0.275, rel=1e-6)
    filled = copper.via_resistance_ohm(1.6e-3, 0.3e-3, 1e-3, 20.0)
    assert filled == pytest.approx(
        copper.conductor_resistance_ohm(1.6e-3, np.pi * 0.15e-3**2, 20.0), rel=1e-9
    )


def test_one_ampere_for_ten_kelvin() -> None:
    # IPC-2221 form: 1 A, 10 K, 1 oz (35 um): 11.83 mil outside, 30.8 mil inside (closed form; about 12 and 31
    # mil, from memory)
    width_m = np.array([11.83, 30.8]) * 25.4e-6
    inner = np.array([False, True])
    assert ampacity.current_limit_a(width_m, 35e-6, 10.0, inner) == pytest.approx(np.ones(2), rel=2e-3)
    assert ampacity.temperature_rise_k(1.0, width_m, 35e-6, inner) == pytest.approx(
        np.full(2, 10.0), rel=4e-3
    )


def test_squares_matrix_gives_drop_and_loss() -> None:
    # closed form: two loads behind one shared square and two and three of their own
    matrix = copper.squares_matrix(1.0, np.array([2.0, 3.0]))
    current_a = np.array([10.0, 20.0])
    assert matrix @ current_a == pytest.approx(np.array([30 + 20.0, 30 + 60.0]), rel=1e-12)
    by_parts = 1.0 * 30.0**2 + 2.0 * 10.0**2 + 3.0 * 20.0**2
    assert current_a @ matrix @ current_a == pytest.approx(by_parts, rel=1e-12)
