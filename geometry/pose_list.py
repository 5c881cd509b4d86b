"""A named list of coil poses in one head frame: what is placed, exported, imported and compared."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final, Literal, TypeAlias

import numpy as np

from .errors import InputError
from .frames import FloatArray, Pose
from .tables import check_cell

Origin: TypeAlias = Literal["scanner", "surface", "template", "landmarks"]
ORIGINS: Final = ("scanner", "surface", "template", "landmarks")
LONGEST_NAME: Final = 64


def head_frame(origin: str) -> str:
    """Return the name of the head frame with this origin; frames of different origins never compose."""
    return f"head[{origin}]"


@dataclass(frozen=True, eq=False)
class PoseList:
    """Poses with their names, in order.

    Parameters
    ----------
    names : sequence of str
        Unique, one a pose.
    pose : Pose
        Batched, from ``coil`` to ``head[origin]``; shape (N, 4, 4).
    origin : str
        Of the head frame.
    coil : str
        The coil's name, or empty where it is not known.
    turned : bool
        Whether the coil stands turned by 180 degrees because its second phase stimulates.
    columns : mapping from name to sequence of str
        Further cells by pose, as text.

    Raises
    ------
    InputError
        An empty list, a name that is there twice, too long, or that does not fit into a table.
    """

    names: tuple[str, ...]
    pose: Pose
    origin: str
    coil: str = ""
    turned: bool = False
    columns: Mapping[str, Sequence[str]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not self.names:
            raise InputError("the pose list is empty; there is nothing to write")
        if self.pose.matrix.shape != (len(self.names), 4, 4):
            raise InputError(f"{len(self.names)} names for poses of shape {self.pose.matrix.shape}")
        seen: set[str] = set()
        problems = []
        for name in self.names:
            if name in seen:
                problems.append(f"pose {name!r} is there twice; names must be unique")
            if len(name) > LONGEST_NAME:
                problems.append(f"pose {name[:20]!r}...: longer than {LONGEST_NAME} characters")
            check_cell(name)
            seen.add(name)
        if problems:
            raise InputError(*problems)

    @classmethod
    def of(cls, names: Sequence[str], head_from_coil: FloatArray, origin: str, **more: object) -> PoseList:
        """Build a list from matrices (N, 4, 4)."""
        if origin not in ORIGINS:
            raise InputError(f"origin: expected one of {', '.join(ORIGINS)}, got {origin!r}")
        matrices = np.asarray(head_from_coil, dtype=np.float64)
        if not len(names):
            raise InputError("the pose list is empty; there is nothing to write")
        pose = Pose(matrices, to_frame=head_frame(origin), from_frame="coil")
        return cls(tuple(names), pose, origin, **more)  # type: ignore[arg-type]  # forwarded by name

    def chosen(self, keep: Sequence[bool]) -> PoseList:
        """Return the poses that are marked, in order."""
        rows = np.flatnonzero(keep).tolist()
        return PoseList(
            tuple(self.names[i] for i in rows),
            Pose(self.pose.matrix[rows], self.pose.to_frame, self.pose.from_frame),
            self.origin,
            self.coil,
            self.turned,
            {name: [cells[i] for i in rows] for name, cells in self.columns.items()},
        )

    def reachable(self) -> list[bool]:
        """Return which poses the table says can be reached; a table that does not say it for all is refused.

        Raises
        ------
        InputError
        """
        cells = self.columns.get("reachable", ["n/a"] * len(self.names))
        unknown = [name for name, cell in zip(self.names, cells, strict=True) if cell not in ("yes", "no")]
        if unknown:
            raise InputError(
                f"pose {unknown[0]!r} and {len(unknown) - 1} others do not say whether they are reachable; place them"
                " anew, or say --unchecked"
                if len(unknown) > 1
                else f"pose {unknown[0]!r} does not say whether it is reachable; place it anew, or say --unchecked"
            )
        return [cell == "yes" for cell in cells]
