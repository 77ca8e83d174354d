"""The starter study that ``new`` writes: a small invented scenario, commented, ready to be changed."""

from __future__ import annotations

from pathlib import Path

from archopt.errors import OutputError

STUDY = """\
# Control unit of a packing line: six rails from a 24 V supply. Every key left out has a default,
# printed as "assumed" when the study is read. Units are in the names of the keys.
title = "Packing line control unit, 24 V, six rails"

# One rail a line; [[rails]] tables or rails = "rails.csv" say the same. step_a is the largest load step,
# parents are rails it may hang on instead of a bus, remote_sense means sensed at the load.
rails = [
    { name = "core", voltage_v = 0.9, max_current_a = 22.0, step_a = 9.0 },
    { name = "memory", voltage_v = 1.2, max_current_a = 6.0, remote_sense = true },
    { name = "logic", voltage_v = 1.8, max_current_a = 4.0 },
    { name = "analog", voltage_v = 2.5, max_current_a = 0.8, parents = ["io"] },
    { name = "io", voltage_v = 3.3, max_current_a = 5.0 },
    { name = "drives", voltage_v = 5.0, max_current_a = 3.0 },
]

[input]
low_v = 18.0             # lowest and highest voltage the board must work at
high_v = 32.0
inlet_degc = 35.0

[board]
area_cm2 = 180.0

[load]
profile = "profile.csv"  # hours, then one utilisation or <rail>_a for each rail; an empty cell is a rail off
covers = "sample"        # one day, scaled to the year

[control]
largest_unannounced_jump_percent = 60.0  # of rated load, without warning; leave it out where not known

[economics]
boards_per_year = 2500.0
energy_price_per_kwh = 0.22
"""

PROFILE = """\
hours,core_a,memory_a,logic_a,analog_a,io_a,drives_a
5.0,3.5,0.9,0.7,0.3,0.6,
1.0,6.0,1.6,1.1,0.4,1.3,0.4
3.5,9.5,2.8,1.8,0.5,2.2,1.5
0.5,4.5,1.2,0.9,0.4,1.0,0.3
3.5,10.5,3.0,2.0,0.5,2.4,1.6
1.5,17.5,4.8,3.0,0.7,3.8,2.4
1.0,21.0,5.6,3.6,0.7,4.4,2.8
3.0,8.5,2.4,1.6,0.5,2.0,1.3
5.0,3.5,0.9,0.7,0.3,0.6,
"""


def write_starter(directory: str | Path) -> tuple[Path, ...]:
    """Write the starter study and its profile into a folder, which is made if need be; return their paths.

    Raises
    ------
    OutputError : a file of that name is there already, or the folder cannot be written
    """
    folder = Path(directory)
    files = {folder / "study.toml": STUDY, folder / "profile.csv": PROFILE}
    if folder.is_file():
        raise OutputError(f"{folder}: a file of that name is in the way; name another folder")
    for path in files:
        if path.exists():
            raise OutputError(f"{path} is there already; name another folder")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for path, text in files.items():
            with path.open("x", encoding="utf-8", newline="\n") as stream:
                stream.write(text)
    except (OSError, ValueError) as error:
        raise OutputError(f"{folder}: cannot be written: {getattr(error, 'strerror', None) or error}") from error
    return tuple(files)
