"""From a study as written to a study with every value filled in and every default recorded."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from archopt.inputs.choice_names import ChoiceChecker
from archopt.inputs.draft import Draft, content_hash
from archopt.inputs.feasibility import check_feasible
from archopt.inputs.floorplan import resolve_floorplan
from archopt.inputs.incumbent import resolve_incumbent
from archopt.inputs.problems import Notebook
from archopt.inputs.resolve_choices import allowed_families, forbidden_parts, resolve_choices
from archopt.inputs.resolve_jumps import resolve_jump
from archopt.inputs.resolve_load import resolve_load
from archopt.inputs.resolve_rails import resolve_rails
from archopt.inputs.resolve_supply import (
    resolve_board,
    resolve_control,
    resolve_derating,
    resolve_economics,
    resolve_search,
    resolve_supply,
)
from archopt.inputs.resolved import Catalogue, LoadTable, ResolvedStudy


def resolve(draft: Draft, catalogue: Catalogue, notebook: Notebook) -> ResolvedStudy | None:
    """Return the study with every value stated or assumed, None where problems were noted.

    Every check that is still possible is made whatever was found before.
    """
    families = allowed_families(draft, notebook)
    forbidden = forbidden_parts(draft, catalogue, families, notebook)
    unusable = frozenset(forbidden)
    derating = resolve_derating(draft, notebook)
    rails = resolve_rails(draft, catalogue, unusable, derating.voltage, notebook)
    load = resolve_load(draft, rails, notebook)
    power_w = sum(rail.voltage_v * rail.max_current_a for rail in rails) * load.coincidence
    supply = resolve_supply(draft, catalogue, unusable, power_w, load.hottest_degc, notebook)
    board = resolve_board(draft, catalogue, unusable, notebook)
    floorplan = resolve_floorplan(draft, rails, board, notebook)
    series = load.table is not None and load.table.series
    jump = resolve_jump(draft, rails, load, notebook)
    control = resolve_control(draft, catalogue, unusable, series, jump, notebook)
    economics = resolve_economics(draft, notebook)
    search = resolve_search(draft, notebook)
    checker = ChoiceChecker(rails, draft.rail_names, catalogue, board)
    choices = resolve_choices(draft, families, forbidden, checker, notebook)
    incumbent = resolve_incumbent(draft, rails, catalogue, board, supply, control, derating, checker, notebook)
    check_feasible(
        draft, rails, supply, control, derating, choices, catalogue, load.coincidence * load.growth, notebook
    )
    if notebook.problems or supply is None or board is None or load.table is None:
        return None
    return ResolvedStudy(
        name=draft.name,
        title=draft.title,
        file=draft.file,
        supply=supply,
        board=board,
        rails=rails,
        load=_with_inlet(load.table, supply.inlet_degc),
        coincidence=load.coincidence,
        growth=load.growth,
        control=control,
        derating=derating,
        economics=economics,
        choices=choices,
        search=search,
        incumbent=incumbent,
        floorplan=floorplan,
        assumed=tuple(notebook.assumptions),
        stated=draft.content,
        study_hash=content_hash(draft.content, *_file_bytes(draft)),
    )


def _with_inlet(load: LoadTable, inlet_degc: float) -> LoadTable:
    """Return the load with the study's inlet air (degC) in every moment that states none."""
    return replace(load, inlet_degc=np.where(np.isnan(load.inlet_degc), inlet_degc, load.inlet_degc))


def _file_bytes(draft: Draft) -> list[bytes]:
    """Return the bytes of the profile, empty when there is none, and of the floorplan where there is one."""
    profile = (draft.folder / draft.load.profile).read_bytes() if draft.load.profile else b""
    return [profile] if draft.floorplan is None else [profile, (draft.folder / draft.floorplan).read_bytes()]
