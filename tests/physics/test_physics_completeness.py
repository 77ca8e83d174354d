"""Every public function and class of the physics room is claimed by a test that names its source."""

from __future__ import annotations

import ast
import importlib
import inspect
import pkgutil
from functools import cache
from pathlib import Path

import pytest

import archopt.physics

TESTS = Path(__file__).parent.parent
BUCK = "published/test_published_buck.py"
LIGHT = "physics/test_buck_light_load.py"
COPPER = "published/test_published_copper.py"
DROOP = "published/test_published_transient.py"
IN_TIME = "property/test_property_transient.py"
TIME_DOMAIN = "published/test_published_time_domain.py"
WAVES = "property/test_property_time_domain.py"
CAPACITOR = "physics/test_physics_capacitor.py"
MEASURED = "physics/test_physics_measured.py"
PARAMETERS = "physics/test_physics_parameters.py"
RIPPLE = "physics/test_output_ripple.py"
SHAPES = "physics/test_physics_sheet.py"
DAMPING = "published/test_published_damping.py"
DISCS = "physics/test_sheet_discs.py"
SHEET = "published/test_published_sheet.py"
THERMAL = "physics/test_physics_thermal.py"

# what is claimed: (test file, test, source of the expected value)
CLAIMS = {
    "ampacity.current_limit_a": (COPPER, "test_one_ampere_for_ten_kelvin", "IPC-2221 form"),
    "ampacity.temperature_rise_k": (COPPER, "test_one_ampere_for_ten_kelvin", "IPC-2221 form"),
    "averaged.LoadStep": (WAVES, "test_a_load_ramps_for_as_long_as_its_slew_takes", "closed form"),
    "averaged.RailCircuit": (WAVES, "test_a_load_line_lowers_the_set_point", "closed form"),
    "averaged.RailWave": (WAVES, "test_a_load_line_lowers_the_set_point", "closed form"),
    "averaged.integrate": (WAVES, "test_integration_meets_an_exponential", "closed form"),
    "averaged.pieces": (WAVES, "test_pieces_between_kinks", "by hand"),
    "averaged.rail_wave": (WAVES, "test_a_load_line_lowers_the_set_point", "closed form"),
    "averaged_board.BoardWave": (WAVES, "test_one_stage_behind_a_stiff_bus_is_the_rail_alone", "rail_wave"),
    "averaged_board.Rise": (WAVES, "test_one_stage_behind_a_stiff_bus_is_the_rail_alone", "rail_wave"),
    "averaged_board.StageCircuit": (WAVES, "test_one_stage_behind_a_stiff_bus_is_the_rail_alone", "rail_wave"),
    "averaged_board.board_wave": (WAVES, "test_one_stage_behind_a_stiff_bus_is_the_rail_alone", "rail_wave"),
    "averaged_bus.BusCircuit": (WAVES, "test_charge_and_energy_balance_of_a_bus", "balance"),
    "averaged_bus.BusWave": (WAVES, "test_charge_and_energy_balance_of_a_bus", "balance"),
    "averaged_bus.Command": (WAVES, "test_a_command_charges_the_bank", "closed form"),
    "averaged_bus.PowerTrain": (WAVES, "test_a_train_of_steps", "closed form"),
    "averaged_bus.bus_eigenvalues": (WAVES, "test_bus_eigenvalues_without_bank_resistance", "closed form"),
    "averaged_bus.bus_wave": (WAVES, "test_charge_and_energy_balance_of_a_bus", "balance"),
    "buck.BuckLosses": (BUCK, "test_total_1_31_w", "ROHM AEK59-D1-0065-2"),
    "buck.BuckParameters": (BUCK, "test_rc5051_duty_with_drops", "RC5051 AN50 p. 9"),
    "buck.Point": (LIGHT, "test_output_ripple_is_a_twelfth_in_continuous_conduction", "closed form"),
    "buck.duty": (BUCK, "test_rc5051_duty_with_drops", "RC5051 AN50 p. 9"),
    "buck.hard_switched_share": (BUCK, "test_reversed_valley_current_swings_the_node", "closed form"),
    "buck.losses": (BUCK, "test_overlap_61_mw", "SNVS276G p. 26"),
    "buck.operating_point": (LIGHT, "test_output_ripple_is_a_twelfth_in_continuous_conduction", "closed form"),
    "buck.output_charge_energy_j": (BUCK, "test_output_charge_against_integrals", "numerical integration"),
    "buck.ripple_a": (BUCK, "test_ripple_of_data_sheet_examples", "SLUS973 p. 21, RT6263A p. 17"),
    "buck.ripple_square_a2": (LIGHT, "test_output_ripple_is_a_twelfth_in_continuous_conduction", "closed form"),
    "buck.ripple_square_at": (LIGHT, "test_output_ripple_is_a_twelfth_in_continuous_conduction", "closed form"),
    "buck.thermal_gain": (LIGHT, "test_thermal_gain_is_that_of_the_losses", "losses"),
    "buck.thermal_gain_at": (LIGHT, "test_thermal_gain_is_that_of_the_losses", "losses"),
    "buck_light_load.Pulses": (LIGHT, "test_pulses_carry_the_load", "closed form"),
    "buck_light_load.crossover_share": (LIGHT, "test_loop_bandwidth_falls_to_its_share", "closed form"),
    "buck_light_load.pulses": (LIGHT, "test_pulses_carry_the_load", "closed form"),
    "bus_converter.ConverterLosses": (PARAMETERS, "test_converter_by_hand", "closed form"),
    "bus_converter.ConverterParameters": (PARAMETERS, "test_converter_by_hand", "closed form"),
    "bus_converter.losses": (PARAMETERS, "test_converter_by_hand", "closed form"),
    "bus_converter.thermal_gain": (PARAMETERS, "test_converter_by_hand", "closed form"),
    "capacitor.buck_input_ripple_rms_a": (BUCK, "test_input_capacitor_1_92_a_and_88_8_mw", "SNVS276G p. 26"),
    "capacitor.buck_output_ripple_rms_a": (CAPACITOR, "test_output_ripple_rms", "sampled waveform"),
    "capacitor.effective_capacitance_f": (CAPACITOR, "test_bias_halves_at_its_voltage", "closed form"),
    "capacitor.esr_loss_w": (BUCK, "test_input_capacitor_1_92_a_and_88_8_mw", "SNVS276G p. 26"),
    "capacitor.interleaved_ripple_a": (CAPACITOR, "test_interleaved_ripple", "sampled waveform"),
    "bus_network.damped_dip_ohm": (DAMPING, "test_dip_of_a_damped_bus_in_time", "integrated in time"),
    "bus_network.joined_bank": (DAMPING, "test_no_damping_bank_changes_nothing", "limit case"),
    "bus_network.network_rates": (
        DAMPING, "test_rates_of_the_network_are_where_its_admittance_vanishes", "closed form",
    ),
    "bus_network.stable_conductance_s": (
        DAMPING, "test_stability_with_a_damping_bank_against_eigenvalues", "eigenvalues",
    ),
    "copper.conductor_resistance_ohm": (COPPER, "test_wire_table", "HyperPhysics after Floyd; NEC chapter 9"),
    "copper.foil_thickness_m": (COPPER, "test_finished_thickness", "IPC-6012 minima as quoted"),
    "copper.resistivity_ohm_m": (COPPER, "test_annealed_copper", "IEC 60028, NBS Handbook 100"),
    "copper.sheet_resistance_ohm": (COPPER, "test_one_ounce_is_34_3_um_and_half_a_milliohm", "IEC 60028"),
    "copper.squares_matrix": (COPPER, "test_squares_matrix_gives_drop_and_loss", "closed form"),
    "copper.trace_resistance_ohm": (COPPER, "test_trace_of_100_mm", "seen, recomputed with IEC 60028"),
    "copper.via_resistance_ohm": (COPPER, "test_via_barrel", "seen for a thin wall; closed form"),
    "linear.LinearLosses": (PARAMETERS, "test_linear_by_hand", "closed form"),
    "linear.LinearParameters": (PARAMETERS, "test_linear_by_hand", "closed form"),
    "linear.headroom_v": (PARAMETERS, "test_linear_by_hand", "closed form"),
    "linear.losses": (PARAMETERS, "test_linear_by_hand", "closed form"),
    "measured.LossTable": (MEASURED, "test_equals_scipy_inside", "scipy RegularGridInterpolator"),
    "measured.beyond_table": (MEASURED, "test_how_far_beyond_the_table_is_a_share_of_its_end", "closed form"),
    "measured.table_loss_w": (MEASURED, "test_exact_for_products_of_linear_functions", "closed form"),
    "output_ripple.half_swing_v": (RIPPLE, "test_half_the_swing_is_never_optimistic", "numerical integration"),
    "output_ripple.summed_ripple": (RIPPLE, "test_ripple_and_charge_are_those_of_the_waveform", "waveform"),
    "output_ripple.summed_ripple_at": (RIPPLE, "test_ripple_and_charge_are_those_of_the_waveform", "waveform"),
    "parameters.Gatherable": (PARAMETERS, "test_take_gathers_every_field_and_keeps_plain_numbers", "numpy"),
    "stability.bank_impedance_ohm": (WAVES, "test_bank_impedance_at_both_ends", "closed form"),
    "sheet.SheetSolution": (SHEET, "test_density_in_a_strip", "closed form"),
    "sheet.solve": (SHEET, "test_van_der_pauw_on_an_irregular_outline", "Philips Res. Rep. 13, 1958"),
    "sheet_cut.cut_along": (SHAPES, "test_a_cut_runs_from_edge_to_edge", "closed form"),
    "sheet_discs.FaceDensity": (DISCS, "test_an_even_strip_is_one_over_its_width", "closed form"),
    "sheet_discs.density_at": (DISCS, "test_an_even_strip_is_one_over_its_width", "closed form"),
    "sheet_discs.face_density": (DISCS, "test_an_even_strip_is_one_over_its_width", "closed form"),
    "sheet_discs.free_copper": (DISCS, "test_discs_stand_on_free_copper", "closed form"),
    "sheet_discs.worst_disc": (DISCS, "test_an_even_strip_is_one_over_its_width", "closed form"),
    "sheet_fields.NeckFlow": (SHAPES, "test_neck_runs_from_edge_to_edge_around_its_middle", "closed form"),
    "sheet_fields.averaged_density_a_per_m": (SHEET, "test_averaged_density_in_an_annulus", "closed form"),
    "sheet_fields.density_a_per_m": (SHEET, "test_density_in_a_strip", "closed form"),
    "sheet_fields.drop_v": (SHEET, "test_density_in_a_strip", "closed form"),
    "sheet_fields.link_current_a": (SHEET, "test_link_currents_add_up_to_what_is_drawn", "Kirchhoff"),
    "sheet_fields.neck_flow": (SHEET, "test_neck_carries_all_and_is_as_wide_as_the_copper", "Kirchhoff"),
    "sheet_findings.SheetFinding": (SHAPES, "test_several_faults_are_told_at_once", "common practice"),
    "sheet_findings.connection_findings": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "common practice"),
    "sheet_findings.findings": (SHAPES, "test_each_fault_is_found_and_placed", "common practice"),
    "sheet_findings.shape_findings": (SHAPES, "test_several_faults_are_told_at_once", "common practice"),
    "sheet_grid.Faces": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_grid.Grid": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_grid.copper_share": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_grid.cut_faces": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_grid.default_pitch_m": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_grid.lay_grid": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_neck.NeckStretch": (SHAPES, "test_neck_runs_from_edge_to_edge_around_its_middle", "closed form"),
    "sheet_neck.neck_stretch": (SHAPES, "test_neck_runs_from_edge_to_edge_around_its_middle", "closed form"),
    "sheet_network.Network": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_network.build_network": (SHAPES, "test_cells_hold_the_copper_of_the_sheet", "closed form"),
    "sheet_network.joined_to": (SHEET, "test_small_grid_against_networkx", "networkx"),
    "sheet_network.solve_network": (SHEET, "test_infinite_square_lattice", "Cserti 2000; OEIS A355565"),
    "sheet_parts.line_crossings": (SHAPES, "test_a_slit_makes_two_nodes_of_a_cell", "closed form"),
    "sheet_parts.part_of_cell": (SHAPES, "test_a_slit_makes_two_nodes_of_a_cell", "closed form"),
    "sheet_shape.DiscPad": (SHEET, "test_two_discs", "textbook, two parallel cylinders"),
    "sheet_shape.Neck": (SHAPES, "test_neck_runs_from_edge_to_edge_around_its_middle", "closed form"),
    "sheet_shape.RectanglePad": (SHEET, "test_straight_strip", "closed form"),
    "sheet_shape.Sheet": (SHEET, "test_straight_strip", "closed form"),
    "sheet_shape.SheetError": (SHAPES, "test_each_fault_is_found_and_placed", "common practice"),
    "sheet_shape.distance_to_segments": (SHAPES, "test_polygons", "closed form"),
    "sheet_shape.edges": (SHAPES, "test_polygons", "closed form"),
    "sheet_shape.inside_polygon": (SHAPES, "test_polygons", "closed form"),
    "sheet_shape.near_pairs": (SHAPES, "test_polygons", "every pair compared"),
    "sheet_shape.on_copper": (SHAPES, "test_polygons", "closed form"),
    "sheet_shape.polygon_area_m2": (SHAPES, "test_polygons", "closed form"),
    "sheet_shape.segments_cross": (SHAPES, "test_polygons", "closed form"),
    "stability.damped_peak": (DROOP, "test_damped_peak_against_a_minimax_search", "from memory; searched"),
    "stability.deliverable_power_w": (
        DROOP, "test_deliverable_power_is_where_the_operating_point_vanishes", "closed form",
    ),
    "stability.impedance_margin_db": (WAVES, "test_positive_impedance_margin_is_stable", "eigenvalues"),
    "stability.least_capacitance_f": (DROOP, "test_stability_against_eigenvalues", "eigenvalues"),
    "stability.output_peak_ohm": (WAVES, "test_output_peak_against_a_fine_sweep", "fine sweep"),
    "stability.regulated_source_h": (
        DROOP, "test_source_inductance_meets_its_resistance_at_the_bandwidth", "closed form",
    ),
    "stability.resistance_limit_ohm": (DROOP, "test_stability_against_eigenvalues", "eigenvalues"),
    "thermal.fixed_point": (THERMAL, "test_fixed_point_is_where_iteration_ends", "iteration"),
    "thermal.thermal_resistance_at": (THERMAL, "test_air_speed", "textbook, laminar flat plate"),
    "transient.buck_slew_a_per_s": (DROOP, "test_slew_of_running_phases", "closed form"),
    "transient.bus_dip_v": (IN_TIME, "test_bus_dip_is_never_optimistic", "integration in time"),
    "transient.rail_droop_v": (IN_TIME, "test_ramped_form_is_exact", "integration in time"),
    "transient.release_v": (DROOP, "test_release_against_the_energy_form", "SLUS659F p. 24, SGLS371A p. 22"),
    "transient.source_peak_ohm": (WAVES, "test_source_peak_against_the_matrix_exponential", "matrix exponential"),
    "transient.step_droop_v": (DROOP, "test_undershoot_of_slus659f", "SLUS659F p. 24"),
    "transient.transition_energy_j": (DROOP, "test_transition_energy", "closed form"),
}  # fmt: skip


def public_names() -> set[str]:
    found = set()
    for module_info in pkgutil.iter_modules(archopt.physics.__path__):
        module = importlib.import_module(f"archopt.physics.{module_info.name}")
        for name, value in vars(module).items():
            own = getattr(value, "__module__", None) == module.__name__
            if own and not name.startswith("_") and (inspect.isfunction(value) or inspect.isclass(value)):
                found.add(f"{module_info.name}.{name}")
    return found


@cache
def parsed(file: str) -> ast.Module:
    return ast.parse((TESTS / file).read_text(encoding="utf-8"))


def names_used(tree: ast.AST) -> set[str]:
    used = {node.id for node in ast.walk(tree) if isinstance(node, ast.Name)}
    return used | {node.attr for node in ast.walk(tree) if isinstance(node, ast.Attribute)}


def test_everything_public_is_claimed_and_nothing_else() -> None:
    assert public_names() == set(CLAIMS)


@pytest.mark.parametrize("claimed", sorted(CLAIMS))
def test_the_claiming_test_exists_and_uses_what_it_claims(claimed: str) -> None:
    file, test, source = CLAIMS[claimed]
    tests = {node.name for node in ast.walk(parsed(file)) if isinstance(node, ast.FunctionDef)}
    assert test in tests
    # by the file and not the one test: a class may reach its test by way of a fixture
    assert claimed.split(".")[1] in names_used(parsed(file))
    assert source
