"""Targets in the head frame: a name, a point, a wanted field direction."""

from __future__ import annotations

import re
from typing import Annotated, Final

from pydantic import Field, model_validator

from .documents import Document, Model, Vector3, read_yaml, validate
from .errors import InputError
from .names import Name
from .tables import floats, read_tsv

TABLE_COLUMNS: Final = ("name", "x_mm", "y_mm", "z_mm", "direction")


class DirectionSpec(Model):
    """A wanted direction: a vector in the head frame, or a midline angle in degrees."""

    vector: Vector3 | None = None
    midline_deg: Annotated[float, Field(ge=-360, le=360)] | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> DirectionSpec:
        if (self.vector is None) == (self.midline_deg is None):
            raise ValueError("expected exactly one of vector, midline_deg")
        if self.vector is not None and not any(self.vector):
            raise ValueError("a vector of zero length has no direction; give one with a length")
        return self


class TargetSpec(Model):
    """A target: its name, its point in the head's file axes and unit, its direction."""

    name: Name
    at_mm: Vector3
    direction: DirectionSpec


def read_target_table(data: bytes, name: str) -> tuple[list[TargetSpec], list[str]]:
    """Read targets from a TSV: ``name x_mm y_mm z_mm direction``.

    The direction is written as in a protocol: ``midline_deg: 45`` or ``vector: [0.7, 0.7, 0]``; a number alone is a
    midline angle.

    Returns
    -------
    list of TargetSpec, list of str
        The targets, and ``file:line`` of each for messages.
    """
    table = read_tsv(data, name, TABLE_COLUMNS, exact=True)
    points = [floats(table[c], name, c) for c in TABLE_COLUMNS[1:4]]
    targets, problems = [], []
    wheres = [f"{name}:{i + 2}:1" for i in range(len(table["name"]))]
    if not wheres:
        raise InputError(f"{name}:2:1: holds no target")
    for i, where in enumerate(wheres):
        try:
            value = {
                "name": table["name"][i],
                "at_mm": [float(axis[i]) for axis in points],
                "direction": _direction_cell(table["direction"][i], where),
            }
            targets.append(validate(Document(where, value, {(): (1, 1)}), TargetSpec))
        except InputError as error:
            problems += [line.replace(f"{where}:1:1:", f"{where}:", 1) for line in error.lines]
    if problems:
        raise InputError(*problems)
    return targets, wheres


def _direction_cell(text: str, where: str) -> object:
    """A cell as the protocol's own YAML reads it, with all its refusals; a number alone is a midline angle."""
    inner = text.strip().removeprefix("{").removesuffix("}")
    written = f"{{{inner}}}" if ":" in inner else inner
    document = read_yaml(f"direction: {written}".encode(), where)
    if document.problems:
        raise InputError(*(re.sub(r":1:\d+:", ":", line, count=1) for line in document.problems.values()))
    value = document.value["direction"]
    return {"midline_deg": value} if isinstance(value, int | float) and not isinstance(value, bool) else value
