"""The whole result of a solve, and of a check, as plain data: what is written, read back and rendered."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from archopt.present.plain import plain_dict

if TYPE_CHECKING:
    from archopt.inputs.resolved import ResolvedStudy

Data = dict[str, Any]

BUSES = ("bus_a", "bus_b")
WATT_COLUMNS = {"30 %": "loss_30_w", "50 %": "loss_50_w", "100 %": "loss_100_w", "hottest": "loss_hottest_w"}
NUMBER_CHOICES = ("count", "nominal_v", "lower_v", "upper_v")
LONGEST_LISTED_LOAD = 200
"""Rows of a load table kept whole in the problem record; a longer series is kept as its means."""


@dataclass(frozen=True)
class FrontRecord:
    """One result: everything the terminal, the files and the report are made from.

    Parameters
    ----------
    designs : explained designs of the published front, ordered by energy loss, named D001, D002 ...
    archive : objectives and encoded choices of every design kept by the search, one row each
    problem : the resolved study, assumptions, states, bands, catalogue rows used, copper matrices
    run : versions, hashes, seed, counts, timings, processor, models and sources, why the search stopped
    incumbent : today's design, explained, with ``violated`` listing the limits it does not meet; or None
    baselines : the same hardware with its bus voltage held or released, one row each
    gains : for each design of ``baselines`` what following the load gains against the best feasible fixed bus
    afresh : baselines with every choice made again (``rows``, ``gains``, ``notes``); empty where not asked for
    losing : the best of each topology that does not win, and why
    leverage : the catalogue numbers whose spread moves the knee most
    merged : designs of the archive left out of ``designs`` as too close to one of them
    """

    designs: list[Data]
    archive: list[Data]
    problem: Data
    run: Data
    incumbent: Data | None = None
    baselines: list[Data] = field(default_factory=list)
    gains: list[Data] = field(default_factory=list)
    afresh: Data = field(default_factory=dict)
    losing: list[Data] = field(default_factory=list)
    leverage: list[Data] = field(default_factory=list)
    not_modelled: list[str] = field(default_factory=list)
    cautions: list[str] = field(default_factory=list)
    merged: int = 0
    notes: list[str] = field(default_factory=list)

    @property
    def front(self) -> list[Data]:
        """One row a published design, the columns of ``front.csv``."""
        return front_rows(self.designs)

    @property
    def study(self) -> Data:
        """The resolved study as plain data."""
        return dict(self.problem.get("study") or {})

    @property
    def currency(self) -> str:
        """The study's currency, as the person wrote it."""
        return str((self.study.get("economics") or {}).get("currency") or "")


@dataclass(frozen=True)
class CheckResult:
    """What ``check`` prints: how the study was understood before anything is searched.

    Parameters
    ----------
    problem : as in :class:`FrontRecord`
    space : ``choices`` (how many there are), ``designs_log10`` (size of the space), ``options`` (rows of
        ``{"choice", "values"}``), and ``parts`` (rows of ``{"family", "offered"}``)
    power : ``sum_of_maxima_w``, ``coincident_w``, ``rated_w`` (with growth), ``mean_w``
    cautions : sentences the person should read before trusting a result
    """

    problem: Data
    space: Data = field(default_factory=dict)
    power: Data = field(default_factory=dict)
    cautions: list[str] = field(default_factory=list)


def study_data(study: ResolvedStudy) -> Data:
    """Plain data of a resolved study; a long load series is replaced by its length and means.

    The series itself stays in the person's file, whose hash is ``study_hash``.
    """
    data: Data = dict(plain_dict(study))
    load = data["load"]
    if len(load["hours"]) > LONGEST_LISTED_LOAD:
        hours = study.load.hours
        total_h = float(hours.sum())
        data["load"] = {
            "series": study.load.series,
            "rows": len(load["hours"]),
            "hours_total": total_h,
            "mean_current_a": (hours @ study.load.current_a / total_h).tolist(),
        }
    return data


def problem_data(
    study: ResolvedStudy,
    *,
    states: Iterable[Mapping[str, object]] = (),
    bands: Iterable[Mapping[str, object]] = (),
    parts: Mapping[str, object] | None = None,
    copper: Mapping[str, object] | None = None,
) -> Data:
    """The problem record of a study: what was solved, whole enough to explain a result a year later.

    Parameters
    ----------
    study : every value stated or assumed
    states : rows of ``state, kind, hours, input_v, load_w``
    bands : rows of ``band, load_from_w, load_to_w, hours``
    parts : family -> name -> the catalogue row, those used
    copper : net -> port resistance matrix in squares
    """
    data = study_data(study)
    assumed = data.pop("assumed")
    return {
        "study": data,
        "assumed": assumed,
        "states": [dict(plain_dict(row)) for row in states],
        "bands": [dict(plain_dict(row)) for row in bands],
        "parts": dict(plain_dict(parts or {})),
        "copper": dict(plain_dict(copper or {})),
    }


def front_rows(designs: Iterable[Data]) -> list[Data]:
    """Rows of the front table, one an explained design, all with the same columns in the same order."""
    return [front_row(design) for design in designs]


def front_row(design: Data) -> Data:
    """One row of the front table: the objectives, what the bus does, what binds, and what it costs to run."""
    choices = design.get("choices") or {}
    beside = design.get("beside") or {}
    watts = design.get("watts") or {}
    binding = design.get("binding") or {}
    objectives = design["objectives"]
    row: Data = {
        "design": design["design"],
        "topology": design.get("topology"),
        "energy_loss_kwh_per_year": objectives["energy_loss_kwh_per_year"],
        "cost_per_board": objectives["cost_per_board"],
        "worst_droop_percent": objectives["worst_droop_percent"],
        "worst_droop_exact_percent": objectives.get("worst_droop_exact_percent"),
    }
    for bus in BUSES:
        present = str(choices.get(f"{bus}.converter", "none")) != "none"
        for choice, column in (
            ("converter", "converter"), ("count", "count"), ("nominal_v", "nominal_v"),
            ("control", "control"), ("lower_v", "lower_v"), ("upper_v", "upper_v"),
        ):  # fmt: skip
            value = choices.get(f"{bus}.{choice}") if present else None
            row[f"{bus}_{column}"] = choice_number(value) if column in NUMBER_CHOICES else value
    row["stack"] = choices.get("board.stack")
    row["roles"] = "; ".join(str(role) for role in design.get("roles") or [])
    row["binding_limit"] = binding.get("limit")
    row["binding_where"] = binding.get("where")
    row["binding_state"] = binding.get("state")
    row["binding_slack"] = binding.get("slack")
    row["binding_unit"] = binding.get("unit")
    for label, column in WATT_COLUMNS.items():
        row[column] = watts.get(label)
    row["energy_input_kwh_per_year"] = beside.get("energy_input_kwh_per_year")
    row["lifetime_cost"] = beside.get("lifetime_cost")
    row["payback_years"] = beside.get("payback_years")
    row["area_mm2"] = beside.get("area_mm2")
    return row


def choice_number(value: object) -> int | float | None:
    """The number a choice stands for; choices are named by text, ``"9.5"``."""
    if isinstance(value, int | float) or value is None:
        return value
    try:
        number = float(str(value))
    except ValueError:
        return None
    return int(number) if number.is_integer() else number


def find_design(designs: list[Data], incumbent: Data | None, wanted: int | str) -> Data | None:
    """The design meant by a number (1 is the first), a name (``D007``, ``d7``), a role, or ``incumbent``."""
    text = str(wanted).strip().lower()
    if text == "incumbent":
        return incumbent
    digits = text.removeprefix("d")
    if digits.isdigit():
        number = int(digits)
        for design in designs:
            if str(design["design"]).lower().removeprefix("d").lstrip("0") == str(number):
                return design
        return None
    for design in designs:
        if text in (str(role).lower() for role in design.get("roles") or []):
            return design
    return None


def summary(record: FrontRecord) -> Data:
    """What a machine reads after a solve: the front's rows and what is said beside it, without the states."""
    incumbent = record.incumbent
    return {
        "study": {name: record.study.get(name) for name in ("name", "title", "file", "study_hash")},
        "run": record.run,
        "front": record.front,
        "incumbent": None if incumbent is None else front_row(incumbent) | {
            "violated": incumbent.get("violated") or []
        },
        "baselines": record.baselines,
        "gains": record.gains,
        "afresh": record.afresh,
        "losing": [
            {**row, "best_design": named(row.get("best_design"))} for row in record.losing
        ],
        "leverage": record.leverage,
        "archive_size": len(record.archive),
        "merged": record.merged,
        "notes": record.notes,
        "cautions": record.cautions,
        "not_modelled": record.not_modelled,
        "assumed": record.problem.get("assumed") or [],
    }  # fmt: skip


def named(design: object) -> Data | None:
    """The front row of a design given whole, or its name alone when that is all there is."""
    if isinstance(design, dict) and "objectives" in design:
        return front_row({"design": "", **design})
    return {"design": str(design)} if isinstance(design, str) else None
