"""Parameter sets held as arrays, one entry a part, that can be gathered by index."""

from __future__ import annotations

from dataclasses import fields
from types import EllipsisType
from typing import Any, Self, cast

import numpy as np

from archopt.physics.arrays import IntArray


class Gatherable:
    """Mixin of the frozen parameter dataclasses; every field is an array (parts, ...) or a number."""

    __slots__ = ()

    def take(self, index: IntArray | EllipsisType | tuple[Any, ...]) -> Self:
        """Gather every field along its first axis.

        Parameters
        ----------
        index : integers of any shape; which entries to take. What was gathered before may be reshaped by slices,
            or by an ellipsis stay as it is, without a copy

        Returns
        -------
        The same class with fields of shape ``index.shape + field.shape[1:]``; plain numbers hold for every
        part and stay as they are.
        """
        gathered: dict[str, Any] = {}
        for item in fields(cast(Any, self)):
            value = np.asarray(getattr(self, item.name), dtype=np.float64)
            gathered[item.name] = value[index] if value.ndim else value
        return type(self)(**gathered)
