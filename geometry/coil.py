"""A coil: casing, handle, windings, pulse and heat constants, in the coil frame, millimetres.

The contact face is z = 0; the body lies at z <= 0; +z points to the head; +x is the direction of the field induced
below the origin while the current first rises. The two built-in coils are generic: dimensioned from common practice
(no source), meant to be replaced by the lab's own file.
"""

from __future__ import annotations

from dataclasses import dataclass
from importlib.resources import files
from pathlib import Path
from typing import Annotated, Any, Final, Literal

import numpy as np
from pydantic import Field, field_validator, model_validator

from .documents import Document, Model, Vector3, Version, read_yaml, validate
from .errors import Finding, InputError, did_you_mean
from .files import Inputs
from .frames import FloatArray, read_only
from .mesh_files import parse_surface
from .names import Name
from .solids import Box, Capsule, Cylinder, Hull, Solid
from .tables import floats, read_tsv

BUILT_IN: Final = ("figure8-generic", "round-generic")
# How far a part may stick out of the contact face before the file is wrong, mm: rounding of typed numbers.
FACE_TOLERANCE_MM: Final = 1e-6
# A hull that holds this much more than the mesh it wraps is worth a look.
HULL_EXCESS: Final = 0.05

# No coil has a side, a radius, turns or a slope beyond this.
Positive = Annotated[float, Field(gt=0, le=10_000)]
Sense = Literal[-1, 1]


class BoxPart(Model):
    """A box with its sides along the coil's axes."""

    size_mm: tuple[Positive, Positive, Positive]
    centre_mm: Vector3


class CylinderPart(Model):
    """A cylinder with its axis along z."""

    radius_mm: Positive
    height_mm: Positive
    centre_mm: Vector3


class CasingPart(Model):
    """One convex solid of the casing: a box, a cylinder, or a closed mesh (its convex hull is used)."""

    box: BoxPart | None = None
    cylinder: CylinderPart | None = None
    mesh: str | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> CasingPart:
        if sum(part is not None for part in (self.box, self.cylinder, self.mesh)) != 1:
            raise ValueError("expected exactly one of box, cylinder, mesh")
        return self


class Handle(Model):
    """The handle or cable outlet: a capsule."""

    from_mm: Vector3
    to_mm: Vector3
    radius_mm: Positive

    @model_validator(mode="after")
    def _has_length(self) -> Handle:
        if self.from_mm == self.to_mm:
            raise ValueError("from_mm and to_mm are the same point; give the two ends of the handle's axis")
        return self


class Loop(Model):
    """A circular loop in a plane of constant z."""

    centre_mm: Vector3
    radius_mm: Positive
    turns: Positive
    sense: Sense


class Spiral(Model):
    """A flat winding whose turns are spread evenly between two radii."""

    centre_mm: Vector3
    inner_mm: Positive
    outer_mm: Positive
    turns: Positive
    sense: Sense

    @field_validator("outer_mm")
    @classmethod
    def _wider(cls, outer: float, info: Any) -> float:
        inner = info.data.get("inner_mm")
        if inner is not None and not outer > inner:
            raise ValueError(f"the outer radius {outer:g} must be larger than the inner {inner:g}")
        return outer


class WindingPart(Model):
    """One winding: a loop, a spiral, or the path of a wire (TSV: x_mm y_mm z_mm, closed by its last stretch)."""

    loop: Loop | None = None
    spiral: Spiral | None = None
    path: str | None = None

    @model_validator(mode="after")
    def _one_kind(self) -> WindingPart:
        if sum(part is not None for part in (self.loop, self.spiral, self.path)) != 1:
            raise ValueError("expected exactly one of loop, spiral, path")
        return self


class Waveform(Model):
    """The pulse: which phase of it stimulates."""

    kind: Literal["monophasic", "biphasic"]
    effective_phase: Literal["first", "second"] = "first"

    @field_validator("effective_phase")
    @classmethod
    def _first_if_monophasic(cls, phase: str, info: Any) -> str:
        if info.data.get("kind") == "monophasic" and phase != "first":
            raise ValueError("a monophasic pulse stimulates in its first phase; say first, or kind: biphasic")
        return phase


class Heat(Model):
    """Measured constants of the contact face."""

    start_c: Annotated[float, Field(ge=-20, le=60)]
    rise_per_full_pulse_c: Annotated[float, Field(ge=0)]
    cooling_s: Positive


class CoilFile(Model):
    """A coil file."""

    coilwright_coil: Version
    name: Name
    casing: Annotated[tuple[CasingPart, ...], Field(min_length=1)]
    handle: Handle | None = None
    windings: tuple[WindingPart, ...] = ()
    slope_a_per_us_at_full_output: Positive
    output_step_percent: Annotated[float, Field(ge=0.001, le=100)] = 1.0
    waveform: Waveform
    heat: Heat | None = None
    generic: bool = False


@dataclass(frozen=True)
class Coil:
    """A coil with its solids made.

    Attributes
    ----------
    file : CoilFile
        What the file says.
    solids : tuple of Solid
        Casing and handle, coil frame, mm.
    paths : tuple of ndarray, each (P, 3)
        Wires given as paths, coil frame, mm.
    findings : tuple of Finding
    """

    file: CoilFile
    solids: tuple[Solid, ...]
    paths: tuple[FloatArray, ...] = ()
    findings: tuple[Finding, ...] = ()

    @property
    def name(self) -> str:
        """The coil's name."""
        return self.file.name

    @property
    def turned(self) -> bool:
        """Whether poses turn the coil by 180 degrees, because its second phase stimulates."""
        return self.file.waveform.effective_phase == "second"

    @property
    def effective_sign(self) -> float:
        """+1 where the first phase stimulates, -1 where the second does."""
        return -1.0 if self.turned else 1.0

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """Centre and radius of a ball that holds casing and handle, coil frame, mm."""
        centres = np.array([solid.bounds[0] for solid in self.solids])
        radii = np.array([solid.bounds[1] for solid in self.solids])
        middle = ((centres - radii[:, None]).min(axis=0) + (centres + radii[:, None]).max(axis=0)) / 2
        return middle, float((np.linalg.norm(centres - middle, axis=1) + radii).max())


def load_coil(written: str, inputs: Inputs, named_by: Path | None = None, where: str | None = None) -> Coil:
    """Load a built-in coil by its name, or a coil file.

    Parameters
    ----------
    written : str
        One of `BUILT_IN`, or a path relative to the file that names it.
    inputs : Inputs
        Remembers what was read.
    named_by : Path, optional
    where : str, optional
        ``file:line:column: key`` for messages.

    Examples
    --------
    >>> load_coil("figure8-generic", Inputs()).turned
    False
    """
    if written in BUILT_IN:
        resource = files("coilwright.protocols") / "coils" / f"{written}.yaml"
        return _build(read_yaml(resource.read_bytes(), f"{written}.yaml"), inputs, None)
    if not written.endswith((".yaml", ".yml")):
        lead = f"{where}: " if where else ""
        raise InputError(
            f"{lead}{written!r} is neither a built-in coil ({', '.join(BUILT_IN)}) nor a coil file (.yaml)"
            f"{did_you_mean(written, BUILT_IN)}"
        )
    path, data = inputs.open(written, named_by, where)
    return _build(read_yaml(data, str(path)), inputs, path)


def _build(document: Document, inputs: Inputs, path: Path | None) -> Coil:
    file = validate(document, CoilFile)
    solids: list[Solid] = []
    findings: list[Finding] = []
    for index, part in enumerate(file.casing):
        at = ("casing", index)
        solid, found = _solid(part, document, at, inputs, path)
        if not float(solid.outline.vertices[:, 2].max()) <= FACE_TOLERANCE_MM:
            raise InputError(f"{document.at(at)}: sticks out of the contact face (z > 0); the body lies at z <= 0")
        solids.append(solid)
        findings += found
    if file.handle:
        handle = Capsule(read_only(file.handle.from_mm), read_only(file.handle.to_mm), file.handle.radius_mm)
        solids.append(handle)
    paths = _paths(file, document, inputs, path)
    return Coil(file, tuple(solids), paths, tuple(findings))


def _solid(
    part: CasingPart, document: Document, at: tuple[str, int], inputs: Inputs, path: Path | None
) -> tuple[Solid, list[Finding]]:
    if part.box:
        return Box(read_only(part.box.size_mm), read_only(part.box.centre_mm)), []
    if part.cylinder:
        c = part.cylinder
        return Cylinder(c.radius_mm, c.height_mm, read_only(c.centre_mm)), []
    where = document.at((*at, "mesh"))
    mesh_path, data = inputs.open(str(part.mesh), path, where)
    mesh = parse_surface(data, mesh_path.name)
    try:
        hull = Hull.of(mesh)
    except InputError as error:
        raise InputError(*(f"{where}: {line}" for line in error.lines)) from None
    excess = hull.outline.volume_mm3 / abs(mesh.volume_mm3) - 1
    if not excess > HULL_EXCESS:
        return hull, []
    message = f"the mesh is not convex; its hull, which holds {excess:.0%} more, is used: split it to reach closer"
    return hull, [Finding(mesh.name, message)]


def _paths(file: CoilFile, document: Document, inputs: Inputs, path: Path | None) -> tuple[FloatArray, ...]:
    result, problems = [], []
    for index, part in enumerate(file.windings):
        where = document.at(("windings", index))
        if part.path is not None:
            wire_path, data = inputs.open(part.path, path, where)
            columns = ("x_mm", "y_mm", "z_mm")
            table = read_tsv(data, str(wire_path), columns, exact=True)
            wire = read_only(np.stack([floats(table[c], str(wire_path), c) for c in columns], axis=1))
            if len(wire) < 3:
                problems.append(f"{where}: a wire needs at least 3 points, got {len(wire)}")
            result.append(wire)
            highest = float(wire[:, 2].max(initial=-np.inf))
        else:
            highest = (part.loop or part.spiral).centre_mm[2]  # type: ignore[union-attr]  # one of three, checked
        if not highest <= FACE_TOLERANCE_MM:
            problems.append(
                f"{where}: the winding crosses the contact face (z = {highest:g} > 0); windings lie behind it"
            )
    if problems:
        raise InputError(*problems)
    return tuple(result)
