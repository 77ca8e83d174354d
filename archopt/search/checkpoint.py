"""A search put by in a file while it runs, so that a run that was killed goes on where it was and ends alike.

The file is one line of words with a digest, then arrays and a JSON head in numpy's own format, without pickled
objects. It is written beside its name and renamed, so that under the name there is a whole one or none. What
it may be resumed by is in its head: the run that reads it must agree in every fact.
"""

from __future__ import annotations

import contextlib
import hashlib
import io
import json
import os
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.errors import OutputError

NAME, PARTIAL = "unfinished.npz", "unfinished.partial"
FIRST_LINE = "archopt unfinished run, version 1, "
EVERY_S = 5.0
LEAST_SHARE = 20.0  # writing may take one part in so many of the time; a large state is put by less often

State = Mapping[str, NDArray[Any]]
Facts = dict[str, str | int]


@dataclass(frozen=True)
class Checkpoint:
    """A run put by. facts: what a run going on from it must agree in; reached: words for a person."""

    facts: Facts
    reached: dict[str, Any]
    state: dict[str, NDArray[Any]]

    def check(self, facts: Facts, directory: Path) -> None:
        """Compare with the facts of the run that wants to go on.

        Raises
        ------
        OutputError : they differ; says in what
        """
        names = [name for name in {**facts, **self.facts} if facts.get(name) != self.facts.get(name)]
        if not names:
            return
        told = "; ".join(difference(name, self.facts.get(name), facts.get(name)) for name in names)
        raise OutputError(
            f"{directory}: the unfinished run there is not this one: {told}. Make these agree to go on with it,"
            " or start afresh in another directory or with --replace"
        )


def difference(name: str, there: str | int | None, here: str | int | None) -> str:
    """Return in words how one fact differs; a digest says nothing to a person."""
    if name.endswith("hash"):
        return f"the {name.removesuffix('hash').strip()} has changed since"
    return f"{name} is {here}, there it is {there}"


def pack(facts: Facts, reached: Mapping[str, Any], state: State) -> bytes:
    """Return a checkpoint as bytes."""
    head = json.dumps({"facts": facts, "reached": dict(reached)}, sort_keys=True).encode()
    buffer = io.BytesIO()
    arrays = {name: narrow(np.asarray(values)) for name, values in state.items()}
    np.savez(buffer, allow_pickle=False, head=np.frombuffer(head, dtype=np.uint8), **arrays)
    body = buffer.getvalue()
    return f"{FIRST_LINE}{hashlib.sha256(body).hexdigest()}\n".encode() + body


def narrow(values: NDArray[Any]) -> NDArray[Any]:
    """Return signed whole numbers in the narrowest signed type that holds them: design rows are small numbers."""
    if values.dtype.kind != "i" or not values.size:
        return values
    low, high = int(values.min()), int(values.max())
    for kind in (np.int8, np.int16, np.int32):
        if np.iinfo(kind).min <= low and high <= np.iinfo(kind).max:
            return values.astype(kind)
    return values


def unpack(content: bytes) -> Checkpoint:
    """Return the checkpoint in bytes that :func:`pack` made.

    Raises
    ------
    ValueError : they are something else, or damaged
    """
    line, _, body = content.partition(b"\n")
    if not line.startswith(FIRST_LINE.encode()):
        raise ValueError("not an unfinished run of this version of archopt")
    if line[len(FIRST_LINE) :].decode("ascii", "replace") != hashlib.sha256(body).hexdigest():
        raise ValueError("damaged")
    with np.load(io.BytesIO(body), allow_pickle=False) as arrays:
        state = {name: widened(arrays[name]) for name in arrays.files if name != "head"}
        head = json.loads(bytes(arrays["head"]))
    return Checkpoint(head["facts"], head["reached"], state)


def widened(values: NDArray[Any]) -> NDArray[Any]:
    """Return signed whole numbers in 64 bits again."""
    return values.astype(np.int64) if values.dtype.kind == "i" else values


def is_there(directory: Path) -> bool:
    """Whether a directory holds an unfinished run."""
    return (directory / NAME).is_file()


def read(directory: Path) -> Checkpoint:
    """Return the unfinished run in a directory.

    Raises
    ------
    OutputError : there is none, it cannot be read, or it is damaged
    """
    path = directory / NAME
    try:
        return unpack(path.read_bytes())
    except OSError as error:
        raise OutputError(f"{path}: cannot be read: {error.strerror or error}") from error
    except (ValueError, KeyError, TypeError) as error:
        raise OutputError(
            f"{path}: {error}; it cannot be gone on with. Start afresh with --replace, or in another directory"
        ) from error


def forget(directory: Path) -> None:
    """Remove the unfinished run from a directory, and the directory where nothing else is in it."""
    for name in (NAME, PARTIAL):
        with contextlib.suppress(OSError):
            (directory / name).unlink()
    with contextlib.suppress(OSError):
        directory.rmdir()


def told(checkpoint: Checkpoint) -> str:
    """Return in words how far an unfinished run is."""
    facts, reached = checkpoint.facts, checkpoint.reached
    words = [f"seed {facts.get('seed')}"]
    if int(facts.get("replicates", 1)) > 1:
        words.append(f"replicate {int(reached.get('replicate', 0)) + 1} of {facts['replicates']}")
    words.append(f"{int(reached.get('evaluations', 0)):,} of {int(facts.get('evaluations', 0)):,} designs tried")
    return ", ".join(words)


class Keeper:
    """Puts a run by in a directory now and then.

    Parameters
    ----------
    directory : where the result will be; made when the first state is put by
    facts : what a run going on from it must agree in
    every_s : least time between two states, and before the first; 5 s unless given
    clock : seconds that pass

    trouble: why the last state could not be written, or nothing; a search goes on without.
    """

    def __init__(
        self,
        directory: Path,
        facts: Facts,
        *,
        every_s: float | None = None,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self.directory = Path(os.path.realpath(directory))
        self.facts = facts
        self.every_s = EVERY_S if every_s is None else every_s
        self.trouble = ""
        self._clock = clock
        self._due_s = clock() + self.every_s

    def offer(self, reached: Mapping[str, Any], state: Callable[[], State], *, at_once: bool = False) -> bool:
        """Put a state by if it is time, or ``at_once``; return whether it was."""
        if not at_once and self._clock() < self._due_s:
            return False
        began = self._clock()
        try:
            self._write(pack(self.facts, reached, state()))
            self.trouble = ""
        except OSError as error:
            self.trouble = f"{self.directory / NAME}: cannot be written: {error.strerror or error}"
        took = self._clock() - began
        self._due_s = self._clock() + max(self.every_s, LEAST_SHARE * took)
        return not self.trouble

    def _write(self, content: bytes) -> None:
        self.directory.mkdir(parents=True, exist_ok=True)
        partial = self.directory / PARTIAL
        with partial.open("wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        partial.replace(self.directory / NAME)
        with contextlib.suppress(OSError):  # a directory cannot be opened everywhere
            handle = os.open(self.directory, os.O_RDONLY)
            try:
                os.fsync(handle)
            finally:
                os.close(handle)
