"""The record of a run: versions, hashes, processor, and the published methods behind the numbers."""

from __future__ import annotations

import platform
from importlib.metadata import PackageNotFoundError, version
from typing import Any

import numpy as np

from archopt.model.problem import Problem

PACKAGES = ("archopt", "pymoo", "moocore", "numpy", "scipy", "pandas", "pydantic", "rich", "typer")

MODELS = {
    "buck losses": "by mechanism, forced conduction; textbook forms checked against SNVS276G p. 26 and others",
    "core loss": "Steinmetz (1892) by ripple",
    "temperature": "fixed point of a loss affine in temperature; laminar convection with the root of air speed",
    "copper": "annealed copper of IEC 60028; finished foil thickness; ground return counted",
    "ampacity": "current and section in the form of IPC-2221, inner layers",
    "droop": "averaged controller with dead time, slew and bandwidth, closed form",
    "stability": "constant-power load behind source resistance and inductance",
    "search": "NSGA-II (Deb and others 2002) over bus genomes, rails completed by enumeration",
    "hypervolume": "reference front's ideal and nadir, reference point 1.1",
}


def package_versions() -> dict[str, str]:
    """Return the versions of what computed the result."""
    out = {"python": platform.python_version()}
    for name in PACKAGES:
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            out[name] = "not installed"
    return out


def processor() -> dict[str, Any]:
    """Return the processor and the features numpy uses on it; the same bytes need the same ones."""
    config: Any = np.show_config(mode="dicts") or {}
    simd = config.get("SIMD Extensions", {})
    blas = config.get("Build Dependencies", {}).get("blas", {})
    return {
        "machine": platform.machine(),
        "features": [*simd.get("baseline", []), *simd.get("found", [])],
        "blas": " ".join(str(blas.get(key, "")) for key in ("name", "version")).strip(),
    }


def run_record(problem: Problem, **facts: Any) -> dict[str, Any]:
    """Return the run record with the given facts (seed, counts, timings, stop reason ...)."""
    return {
        "versions": package_versions(),
        "study_hash": problem.study.study_hash,
        "catalogue_hash": problem.catalogue.content_hash,
        "processor": processor(),
        "models": MODELS,
        **facts,
    }
