"""A protocol with all that its files say: lab, coil, head, targets; each read once, each error with its place."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from coilwright.geometry.coil import Coil, load_coil
from coilwright.geometry.documents import Document, read_yaml
from coilwright.geometry.errors import Finding, InputError
from coilwright.geometry.files import Inputs
from coilwright.geometry.frames import FloatArray, points_to_ras_mm
from coilwright.geometry.mesh_files import parse_surface
from coilwright.geometry.phantom import phantom_cortex, phantom_scalp
from coilwright.geometry.surface import Surface, check_head_size, check_winding, outward
from coilwright.geometry.tables import floats, read_tsv
from coilwright.geometry.targets import TargetSpec, read_target_table
from coilwright.geometry.windings import check_x_axis

from .lab import LabFile, parse_lab
from .protocol import HeadSpec, Protocol, parse_protocol

# The centre of a sphere that stands for a head lies well inside it, mm.
SPHERE_CENTRE_MM = 30.0


@dataclass(frozen=True)
class Source:
    """A protocol with everything that its files say, read once.

    Attributes
    ----------
    path : Path
        Of the protocol.
    document : Document
    protocol : Protocol
    lab : LabFile or None
    lab_path : Path or None
        The ledger's folder is relative to it.
    coil : Coil
    """

    path: Path
    document: Document
    protocol: Protocol
    lab: LabFile | None
    lab_path: Path | None
    coil: Coil


@dataclass(frozen=True)
class Head:
    """The subject's head: surfaces in the head frame, what to look at, named points."""

    scalp: Surface
    cortex: tuple[Surface, ...]
    origin: str
    landmarks: dict[str, FloatArray]
    findings: tuple[Finding, ...]


def read_source(path: Path, inputs: Inputs) -> Source:
    """Read a protocol, its lab file and its coil.

    Raises
    ------
    InputError
        Everything that is wrong, all at once.
    """
    _, data = inputs.open(str(path))
    document = read_yaml(data, str(path))
    protocol = parse_protocol(document)
    problems: list[str] = []
    lab, lab_path, coil = None, None, None
    try:
        lab, lab_path = _read_lab(protocol, document, path, inputs)
    except InputError as error:
        problems += error.lines
    try:
        coil = load_coil(protocol.coil, inputs, path, document.at(("coil",)))
    except InputError as error:
        problems += error.lines
    if coil is not None and coil.file.windings:
        try:
            check_x_axis(coil)
        except InputError as error:
            problems += [f"{document.at(('coil',))}: {line}" for line in error.lines]
    if problems or coil is None:
        raise InputError(*problems)
    return Source(path, document, protocol, lab, lab_path, coil)


def _read_lab(protocol: Protocol, document: Document, path: Path, inputs: Inputs) -> tuple[LabFile | None, Path | None]:
    if protocol.limits is None:
        return None, None
    lab_path, data = inputs.open(protocol.limits, path, document.at(("limits",)))
    return parse_lab(read_yaml(data, str(lab_path))), lab_path


def read_head(source: Source, inputs: Inputs) -> Head:
    """Read the head's surfaces and landmarks into the head frame.

    Raises
    ------
    InputError
        Files that are missing, damaged, or no head in the declared unit.
    """
    spec = source.protocol.head
    landmarks = _landmarks(spec, source, inputs)
    if spec.phantom:
        return Head(phantom_scalp(), (phantom_cortex(),), spec.origin or "surface", landmarks, ())
    where = source.document.at(("head", "scalp"))
    scalp = _surface(str(spec.scalp), spec, source, inputs, where)
    _within(where, check_head_size, scalp, spec.unit)
    _within(where, check_winding, scalp)
    scalp, turned = outward(scalp)
    _check_sphere_in_scalp(source, scalp)
    cortex = tuple(
        _surface(written, spec, source, inputs, source.document.at(("head", "cortex"))) for written in spec.cortex
    )
    return Head(scalp, cortex, str(spec.origin), landmarks, (*scalp.findings(), *turned))


def _within(where: str, check: object, *args: object) -> object:
    """Call a check and put the place in the file before what it says."""
    try:
        return check(*args)  # type: ignore[operator]  # any callable
    except InputError as error:
        raise InputError(*(f"{where}: {line}" for line in error.lines)) from None


def _surface(written: str, spec: HeadSpec, source: Source, inputs: Inputs, where: str) -> Surface:
    path, data = inputs.open(written, source.path, where)
    try:
        return parse_surface(data, path.name, axes=spec.axes, unit=spec.unit)
    except InputError as error:
        raise InputError(*(f"{where}: {line}" for line in error.lines)) from None


def _landmarks(spec: HeadSpec, source: Source, inputs: Inputs) -> dict[str, FloatArray]:
    if spec.landmarks is None:
        return {}
    path, data = inputs.open(spec.landmarks, source.path, source.document.at(("head", "landmarks")))
    table = read_tsv(data, str(path), ("name", "x_mm", "y_mm", "z_mm"), exact=True)
    points = np.stack([floats(table[c], str(path), c) for c in ("x_mm", "y_mm", "z_mm")], axis=1)
    converted = points_to_ras_mm(points, axes=spec.axes, unit="mm")
    if len(set(table["name"])) < len(table["name"]):
        raise InputError(f"{path}: two landmarks have one name; names must be unique")
    return dict(zip(table["name"], converted, strict=True))


def read_targets(source: Source, inputs: Inputs) -> tuple[list[TargetSpec], list[str]]:
    """Return the targets and the place of each, from the protocol's list or its table."""
    listed = source.protocol.targets
    if isinstance(listed, tuple):
        return list(listed), [source.document.at(("targets", i)) for i in range(len(listed))]
    path, data = inputs.open(listed, source.path, source.document.at(("targets",)))
    targets, wheres = read_target_table(data, str(path))
    names = [target.name for target in targets]
    twice = [i for i, name in enumerate(names) if name in names[:i]]
    if twice:
        raise InputError(*(f"{wheres[i]}: {names[i]!r} is the name of two targets; rename one" for i in twice))
    return targets, wheres


def _check_sphere_in_scalp(source: Source, scalp: Surface) -> None:
    given = source.protocol.head.sphere
    if given is None:
        return
    inside = -float(scalp.signed_distance(np.array([given.centre_mm]))[0])
    if not inside > SPHERE_CENTRE_MM:
        raise InputError(
            f"{source.document.at(('head', 'sphere'))}: its centre lies {inside:.0f} mm inside the scalp, expected at"
            f" least {SPHERE_CENTRE_MM:g}; check the frame and unit of centre_mm"
        )
