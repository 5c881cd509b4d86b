"""The one place where a protocol meets the geometry: protocol to poses."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from coilwright.geometry.clearance import DISTANCE_TOLERANCE_MM, Lifted, Obstacle, clearances, lift_clear
from coilwright.geometry.draws import Draws
from coilwright.geometry.errors import Finding, InputError, ItemError
from coilwright.geometry.field import check_inside, field_at_targets
from coilwright.geometry.files import Inputs
from coilwright.geometry.frames import FloatArray, angle_between_deg
from coilwright.geometry.placement import Directions, Standing, check_targets, place, scalp_quality, stand
from coilwright.geometry.pose_list import PoseList
from coilwright.geometry.pose_sets import patch, random_scalp_points
from coilwright.geometry.reach import LIMIT, Windows, tilt_windows
from coilwright.geometry.sphere import FIT_RADIUS_MM, NARROW_FIT_RADIUS_MM, RESIDUAL_FINDING_MM, Spheres, fit_spheres
from coilwright.geometry.tables import MISSING, column_texts
from coilwright.geometry.targets import TargetSpec
from coilwright.geometry.triangles import dot
from coilwright.geometry.windings import coil_elements

from .sources import Head, Source, read_head, read_targets

# A lift over this is worth a look, mm.
LIFT_FINDING_MM = 2.0
# A field that stands farther off the wanted direction is worth a look, degrees.
DIRECTION_FINDING_DEG = 20.0
# A change of the field between the two sphere fits over this is worth a look.
FIT_CHANGE_FINDING = 0.10


@dataclass(frozen=True)
class Planned:
    """Poses of a protocol, those that cannot be reached included.

    Attributes
    ----------
    source : Source
    head : Head
    poses : PoseList
        With every column of ``poses.tsv``.
    reachable : ndarray of bool, shape (N,)
    findings : tuple of Finding
    """

    source: Source
    head: Head
    poses: PoseList
    reachable: np.ndarray
    findings: tuple[Finding, ...]

    def windows(self, progress: Callable[[int], None] | None = None) -> Windows:
        """Find the tilt windows of the poses that can be reached, in their order; the longest part of placing.

        By hand hair gives way, so the margin is kept from the scalp, not the standoff.
        """
        reach = self.source.protocol.reach
        scalp = Obstacle("scalp", self.head.scalp.triangles, 0.0, reach.margin_mm)
        return tilt_windows(
            self.poses.pose.matrix[self.reachable],
            self.source.coil.solids,
            (scalp, *_keep_outs(self.source)),
            limit_deg=reach.tilt_limit_deg,
            azimuth_step_deg=reach.azimuth_step_deg,
            progress=progress,
        )

    def table(self, windows: Windows) -> PoseList:
        """Return the poses with the smallest tilt of each one that can be reached."""
        smallest = np.full(len(self.poses.names), np.nan)
        smallest[self.reachable] = windows.tilt_deg.min(axis=1)
        return replace(self.poses, columns=dict(self.poses.columns) | {"tilt_clear_deg": column_texts(smallest)})

    def blocker(self, index: int) -> str:
        """Return the name of what blocks a tilt: ``scalp``, a keep-out's name, or ``limit``."""
        if index == LIMIT:
            return "limit"
        names = ["scalp", *(keep_out.name for keep_out in self.source.protocol.reach.keep_out)]
        return names[index]


def plan_poses(source: Source, inputs: Inputs) -> Planned:
    """Turn a protocol's targets and region into poses.

    Returns
    -------
    Planned
        Every pose with its numbers, reachable or not.

    Raises
    ------
    InputError
        Targets or regions that mean nothing on this head, each with its place in the file.
    """
    head = read_head(source, inputs)
    targets, wheres = read_targets(source, inputs)
    findings = [*source.coil.findings, *head.findings]
    parts: list[PoseList] = []
    if targets:
        try:
            part, found = _target_poses(source, head, targets)
        except ItemError as error:
            raise InputError(*(f"{wheres[i]}: {targets[i].name}: {reason}" for i, reason in error.problems)) from None
        parts.append(part)
        findings += found
    if source.protocol.region:
        where = source.document.at(("region",))
        try:
            part, found = _region_poses(source, head)
        except InputError as error:
            raise InputError(*(f"{where}: {line}" for line in error.lines)) from None
        parts.append(part)
        findings += found
    poses = _joined(parts)
    return Planned(source, head, poses, np.array(poses.reachable()), tuple(findings))


def _keep_outs(source: Source) -> tuple[Obstacle, ...]:
    reach = source.protocol.reach
    return tuple(
        Obstacle.ball(item.name, np.array(item.centre_mm), item.radius_mm, reach.margin_mm) for item in reach.keep_out
    )


def _joined(parts: Sequence[PoseList]) -> PoseList:
    first = parts[0]
    return PoseList.of(
        [name for part in parts for name in part.names],
        np.concatenate([part.pose.matrix for part in parts]),
        first.origin,
        coil=first.coil,
        turned=first.turned,
        columns={c: [cell for part in parts for cell in part.columns[c]] for c in first.columns},
    )


def _target_poses(source: Source, head: Head, targets: list[TargetSpec]) -> tuple[PoseList, list[Finding]]:
    protocol, names = source.protocol, [target.name for target in targets]
    points = np.array([target.at_mm for target in targets])
    nearest = check_targets(head.scalp, points)
    spheres = _spheres(source, head, nearest)
    check_inside(spheres, points)
    _check_cortex_in_sphere(source, head)
    standing = place(
        head.scalp,
        points,
        Directions(
            np.array([target.direction.vector or (np.nan,) * 3 for target in targets]),
            np.array([np.nan if (d := t.direction.midline_deg) is None else d for t in targets]),
        ),
        standoff_mm=protocol.standoff_mm,
        normal_radius_mm=protocol.placement.normal_radius_mm,
        aim=protocol.placement.aim,
        spheres=spheres,
        turned=source.coil.turned,
    )
    lifted = _lift(source, head, standing)
    numbers = {
        "target_depth_mm": np.linalg.norm(lifted.head_from_coil[:, :3, 3] - points, axis=1),
        "projection_deg": standing.projection_deg,
    }
    field, found = _field_columns(source, head, lifted, standing, points, spheres, nearest)
    findings = [Finding(name, message) for name, message in scalp_quality(head.scalp, standing.scalp_points, names)]
    findings += found + _sphere_findings(spheres, names) + _lift_findings(lifted, names, protocol.reach.lift_most_mm)
    return _table(source, head, names, names, lifted, numbers | field), findings


def _region_poses(source: Source, head: Head) -> tuple[PoseList, list[Finding]]:
    protocol, region = source.protocol, source.protocol.region
    assert region is not None
    draws = Draws(region.seed, "region")
    where = patch(head.scalp, np.array(region.centre_mm), region.radius_mm)
    points = random_scalp_points(head.scalp, where, region.poses, draws)
    low, high = region.midline_deg
    angles = low + (high - low) * draws.unit(region.poses)
    try:
        standing = stand(
            head.scalp,
            points,
            Directions.midline(angles),
            standoff_mm=protocol.standoff_mm,
            normal_radius_mm=protocol.placement.normal_radius_mm,
            turned=source.coil.turned,
        )
    except ItemError as error:
        count, reason = len(error.problems), error.problems[0][1].split(";")[0]
        raise InputError(f"{count} of {region.poses} random poses cannot stand: {reason}; move or shrink it") from None
    lifted = _lift(source, head, standing)
    width = max(3, len(str(region.poses)))
    names = [f"region-{i + 1:0{width}d}" for i in range(region.poses)]
    missing = np.full(region.poses, np.nan)
    numbers = dict.fromkeys(("target_depth_mm", "projection_deg", "direction_error_deg", "field_per_slope"), missing)
    table = _table(source, head, names, [MISSING] * len(names), lifted, numbers)
    return table, _lift_findings(lifted, names, protocol.reach.lift_most_mm)


def _spheres(source: Source, head: Head, at: FloatArray) -> Spheres:
    given = source.protocol.head.sphere
    if given:
        return Spheres.given(given.centre_mm, given.radius_mm, len(at))
    return fit_spheres(head.scalp, at)


def _check_cortex_in_sphere(source: Source, head: Head) -> None:
    given = source.protocol.head.sphere
    if given is None:
        return
    for cortex in head.cortex:
        farthest = float(np.linalg.norm(cortex.vertices - np.array(given.centre_mm), axis=1).max())
        if not farthest < given.radius_mm:
            where = source.document.at(("head", "sphere"))
            raise InputError(
                f"{where}: {cortex.name} reaches {farthest:.1f} mm from the sphere's centre, beyond its radius"
                f" {given.radius_mm:g}; give a sphere that holds the cortex, or leave it out to have it fitted"
            )


def _lift(source: Source, head: Head, standing: Standing) -> Lifted:
    return lift_clear(
        standing.head_from_coil,
        source.coil.solids,
        head.scalp,
        standoff_mm=source.protocol.standoff_mm,
        lift_most_mm=source.protocol.reach.lift_most_mm,
    )


def _field_columns(
    source: Source,
    head: Head,
    lifted: Lifted,
    standing: Standing,
    points: FloatArray,
    spheres: Spheres,
    nearest: FloatArray,
) -> tuple[dict[str, FloatArray], list[Finding]]:
    """The field of the stimulating phase at each target: along the wanted direction, and its angle to it."""
    missing = np.full(len(points), np.nan)
    if not source.coil.file.windings:
        note = Finding(source.coil.name, "the coil file has no windings: no field is known, its columns are n/a")
        return {"direction_error_deg": missing, "field_per_slope": missing}, [note]
    elements = coil_elements(source.coil)
    sign = source.coil.effective_sign

    def field(centres: FloatArray) -> FloatArray:
        return sign * field_at_targets(lifted.head_from_coil, elements, points, centres)

    e = field(spheres.centres)
    columns = {
        "direction_error_deg": angle_between_deg(standing.wanted, e),
        "field_per_slope": dot(e, standing.wanted),
    }
    if source.protocol.head.sphere:
        return columns, _direction_findings(columns["direction_error_deg"])
    narrow = field(fit_spheres(head.scalp, nearest, within_mm=NARROW_FIT_RADIUS_MM).centres)
    change = np.linalg.norm(narrow - e, axis=1) / np.linalg.norm(e, axis=1)
    worst = int(change.argmax())
    found = _direction_findings(columns["direction_error_deg"])
    if not change[worst] > FIT_CHANGE_FINDING:
        return columns, found
    words = (
        f"the field changes by up to {change[worst]:.0%} between spheres fitted within {NARROW_FIT_RADIUS_MM:g}"
        f" and {FIT_RADIUS_MM:g} mm (target {worst + 1} of {len(points)}): the head is far from a sphere there; read"
        " its field with care"
    )
    return columns, [*found, Finding("sphere", words)]


def _direction_findings(error_deg: FloatArray) -> list[Finding]:
    worst = int(error_deg.argmax())
    if error_deg[worst] <= DIRECTION_FINDING_DEG:
        return []
    words = (
        f"at target {worst + 1} of {len(error_deg)} it stands {error_deg[worst]:.0f} degrees off the wanted direction"
        f" (over {DIRECTION_FINDING_DEG:g}): the target is deep or off to the side of the coil"
    )
    return [Finding("field", words)]


def _sphere_findings(spheres: Spheres, names: list[str]) -> list[Finding]:
    rows = np.flatnonzero(~(spheres.residual_mm <= RESIDUAL_FINDING_MM))
    return [
        Finding(
            names[i],
            f"the fitted sphere leaves {spheres.residual_mm[i]:.1f} mm (over {RESIDUAL_FINDING_MM:g}): the field there"
            " is rough; give head.sphere if you know better",
        )
        for i in rows
    ]


def _lift_findings(lifted: Lifted, names: list[str], most: float) -> list[Finding]:
    rows = np.flatnonzero((lifted.lift_mm > LIFT_FINDING_MM) & (lifted.lift_mm < most))
    return [
        Finding(
            names[i],
            f"lifted by {lifted.lift_mm[i]:.1f} mm (over {LIFT_FINDING_MM:g}) to keep the casing off the scalp",
        )
        for i in rows
    ]


def _table(
    source: Source, head: Head, names: list[str], targets: list[str], lifted: Lifted, numbers: dict[str, FloatArray]
) -> PoseList:
    clearance, reasons = _reach(source, lifted)
    texts = {
        "scalp_mm": head.scalp.nearest(lifted.head_from_coil[:, :3, 3]).distance,
        "clearance_mm": clearance,
        **numbers,
        "tilt_clear_deg": np.full(len(names), np.nan),
    }
    return PoseList.of(
        names,
        lifted.head_from_coil,
        head.origin,
        coil=source.coil.name,
        turned=source.coil.turned,
        columns={
            "target": targets,
            **{name: column_texts(values) for name, values in texts.items()},
            "reachable": ["no" if reason else "yes" for reason in reasons],
            "reason": [reason or MISSING for reason in reasons],
        },
    )


def _reach(source: Source, lifted: Lifted) -> tuple[FloatArray, list[str]]:
    """Least clearance of each pose, and why it cannot be reached (or an empty text)."""
    protocol, reach = source.protocol, source.protocol.reach
    clearance = lifted.clearance_mm.copy()
    reasons: list[list[str]] = [[] for _ in clearance]
    for i in np.flatnonzero(~(lifted.clearance_mm >= protocol.standoff_mm - 2 * DISTANCE_TOLERANCE_MM)):
        reasons[i].append(
            f"scalp {_distance(clearance[i])} at the largest lift of {reach.lift_most_mm:g} mm,"
            f" {protocol.standoff_mm:g} mm wanted"
        )
    for obstacle in _keep_outs(source):
        distance = clearances(lifted.head_from_coil, source.coil.solids, obstacle)
        clearance = np.minimum(clearance, distance)
        for i in np.flatnonzero(~(distance >= reach.margin_mm - DISTANCE_TOLERANCE_MM)):
            reasons[i].append(f"{obstacle.name} {_distance(distance[i])}, {reach.margin_mm:g} mm wanted")
    return clearance, ["; ".join(parts) for parts in reasons]


def _distance(value: float) -> str:
    return f"{value:.2f} mm away" if value >= 0 else f"entered by {-value:.1f} mm"
