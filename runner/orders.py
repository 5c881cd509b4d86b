"""In which order poses and intensities are visited: shuffled, in blocks, balanced, as listed; with constraints.

An entry is one visit: a pose at an intensity, fired once (a pulse, a train or a pattern). All draws are raw words.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from coilwright.geometry.draws import Draws
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import FloatArray, IntArray

# A swap is looked for among this many random partners, in so many rounds over what still stands wrongly.
_PARTNERS: Final = 48
_MOST_SWEEPS: Final = 200


@dataclass(frozen=True)
class Entries:
    """Visits in order.

    Attributes
    ----------
    pose, level : ndarray of int, shape (E,)
        Index of the pose and of the intensity.
    group : ndarray of int, shape (E,)
        Entries may change places only within their group (a block).
    """

    pose: IntArray
    level: IntArray
    group: IntArray


@dataclass(frozen=True)
class Constraints:
    """What neighbours in the order must keep to.

    Attributes
    ----------
    origins : ndarray, shape (P, 3)
        Contact points of the poses, mm.
    apart_mm : float
        Consecutive poses are at least so far apart; 0 asks for nothing.
    longest_run : int or None
        Most entries of one intensity in a row.
    """

    origins: FloatArray
    apart_mm: float = 0.0
    longest_run: int | None = None

    def active(self) -> bool:
        """Whether anything is asked for."""
        return self.apart_mm > 0 or self.longest_run is not None


def order_entries(kind: str, poses: int, levels: int, per_pose: int, *, seed: int, constraints: Constraints) -> Entries:
    """Return the entries of a session in order.

    Parameters
    ----------
    kind : {"shuffled", "blocks", "balanced", "as_listed"}
    poses, levels, per_pose : int
        Each pose is visited `per_pose` times at each of `levels` intensities.
    seed : int
    constraints : Constraints

    Raises
    ------
    InputError
        An order that does not exist (with the reason), or that was not found.

    Examples
    --------
    >>> none = Constraints(np.zeros((3, 3)))
    >>> order_entries("as_listed", 2, 1, 2, seed=0, constraints=none).pose.tolist()
    [0, 0, 1, 1]
    """
    make = {"shuffled": _shuffled, "blocks": _blocks, "balanced": _balanced, "as_listed": _as_listed}[kind]
    entries = make(poses, levels, per_pose, seed)
    if not constraints.active() or len(entries.pose) < 2:
        return entries
    _refuse_impossible(entries, constraints)
    return _repaired(entries, constraints, seed, fixed=kind in ("balanced", "as_listed"))


def _as_listed(poses: int, levels: int, per_pose: int, seed: int) -> Entries:  # noqa: ARG001 - one face for all orders
    pose = np.repeat(np.arange(poses), levels * per_pose)
    level = np.tile(np.repeat(np.arange(levels), per_pose), poses)
    return Entries(pose, level, np.zeros_like(pose))


def _shuffled(poses: int, levels: int, per_pose: int, seed: int) -> Entries:
    listed = _as_listed(poses, levels, per_pose, seed)
    order = Draws(seed, "order").shuffled(len(listed.pose))
    return Entries(listed.pose[order], listed.level[order], listed.group)


def _blocks(poses: int, levels: int, per_pose: int, seed: int) -> Entries:
    """Each block holds every pose once, at one intensity; no pose twice in a row across a border."""
    if poses < 2:
        raise InputError("order.kind: blocks need at least two poses that can be reached; say shuffled")
    draws = Draws(seed, "order")
    count = levels * per_pose
    level = np.repeat(np.arange(levels), per_pose)[draws.shuffled(count)]
    rows = np.argsort(draws.words(count * poses).reshape(count, poses), axis=1, kind="stable")
    other = draws.below(poses - 1, count) + 1
    for k in range(1, count):
        if rows[k, 0] == rows[k - 1, -1]:
            rows[k, [0, other[k]]] = rows[k, [other[k], 0]]
    return Entries(rows.ravel().astype(np.int64), np.repeat(level, poses), np.repeat(np.arange(count), poses))


def williams_rows(count: int) -> IntArray:
    """Return a Williams design: rows in which each condition follows each other equally often.

    Williams 1949, Aust J Sci Res A 2:149-168. Even numbers need `count` rows, odd ones the mirrored rows as well.

    Examples
    --------
    >>> williams_rows(4).tolist()
    [[0, 1, 3, 2], [1, 2, 0, 3], [2, 3, 1, 0], [3, 0, 2, 1]]
    """
    steps = np.arange(count)
    first = np.where(steps % 2 == 1, (steps + 1) // 2, count - steps // 2) % count
    rows = (first[None] + steps[:, None]) % count
    return np.concatenate([rows, rows[:, ::-1]]) if count % 2 else rows


def _balanced(poses: int, levels: int, per_pose: int, seed: int) -> Entries:
    if poses < 2:
        raise InputError("order.kind: a balanced order needs at least two poses that can be reached; say shuffled")
    rows = williams_rows(poses)
    if per_pose % len(rows):
        raise InputError(
            f"order.kind: a balanced order of {poses} poses needs {len(rows) * poses} pulses at each intensity"
            f" (pulses.per_pose a multiple of {len(rows)}); this session has {per_pose * poses}; say blocks or shuffled"
        )
    draws = Draws(seed, "rows")
    designs = levels * (per_pose // len(rows))
    level = np.repeat(np.arange(levels), per_pose // len(rows))[draws.shuffled(designs)]
    parts = []
    for _ in range(designs):
        names, turn = draws.shuffled(poses), draws.shuffled(len(rows))
        parts.append(names[rows[turn]].ravel())
    pose = np.concatenate(parts)
    return Entries(pose, np.repeat(level, rows.size), np.zeros_like(pose))


def _refuse_impossible(entries: Entries, constraints: Constraints) -> None:
    """Refuse, with its proof, what no order can satisfy."""
    total = len(entries.pose)
    if constraints.apart_mm > 0:
        counts = np.bincount(entries.pose)
        most = int(counts.argmax())
        if counts[most] > (total + 1) // 2:
            raise InputError(
                f"order.apart_mm: impossible: one pose stands for {counts[most]} of {total} visits, so two of them must"
                " follow each other; add poses or lower apart_mm"
            )
        near = _too_close(constraints, np.arange(len(counts))[:, None], np.arange(len(counts))[None])
        alone = np.flatnonzero((near | (counts == 0)[None]).all(axis=1) & (counts > 0))
        if alone.size:
            raise InputError(
                f"order.apart_mm: impossible: pose {alone[0] + 1} has no other pose {constraints.apart_mm:g} mm away;"
                " lower apart_mm"
            )
    if constraints.longest_run is not None:
        counts = np.bincount(entries.level)
        most = int(counts.argmax())
        if counts[most] > (total - counts[most] + 1) * constraints.longest_run:
            raise InputError(
                f"order.longest_run: impossible: {counts[most]} of {total} visits have one intensity; runs of at most"
                f" {constraints.longest_run} hold {(total - counts[most] + 1) * constraints.longest_run} of them"
            )


def _too_close(constraints: Constraints, first: IntArray, second: IntArray) -> np.ndarray:
    if not constraints.apart_mm > 0:
        return np.zeros(np.broadcast_shapes(first.shape, second.shape), dtype=bool)
    gap = constraints.origins[first] - constraints.origins[second]
    return np.asarray((gap**2).sum(axis=-1) < constraints.apart_mm**2)


def _violations(pose: IntArray, level: IntArray, constraints: Constraints) -> IntArray:
    """Positions (from 1) of entries that stand wrongly after the one before them."""
    wrong = np.zeros(len(pose), dtype=bool)
    wrong[1:] = _too_close(constraints, pose[:-1], pose[1:])
    if constraints.longest_run is not None:
        starts = np.flatnonzero(np.diff(level, prepend=-1))
        place = np.arange(len(level)) - np.repeat(starts, np.diff(starts, append=len(level)))
        wrong |= (place > 0) & (place % constraints.longest_run == 0)
    return np.flatnonzero(wrong)


def _repaired(entries: Entries, constraints: Constraints, seed: int, *, fixed: bool) -> Entries:
    """Swap entries until nothing is violated: a bounded number of swaps, none of which adds a violation."""
    pose, level = entries.pose.copy(), entries.level.copy()
    draws = Draws(seed, "repair")
    wrong = _violations(pose, level, constraints)
    if wrong.size and fixed:
        raise InputError(
            f"order: {wrong.size} neighbours break apart_mm or longest_run, and this kind of order fixes every place"
            "; say shuffled or blocks, or lower the constraint"
        )
    for _ in range(_MOST_SWEEPS):
        for at in wrong.tolist():
            _swap_one(at, pose, level, entries.group, constraints, draws)
        wrong = _violations(pose, level, constraints)
        if not wrong.size:
            return Entries(pose, level, entries.group)
    raise InputError(
        f"order: no order found that keeps apart_mm and longest_run: {len(wrong)} places left after {_MOST_SWEEPS}"
        " rounds of swaps; it is not proven that there is none: try another seed, or lower the constraint"
    )


def _swap_one(
    at: int, pose: IntArray, level: IntArray, group: IntArray, constraints: Constraints, draws: Draws
) -> None:
    """Swap an entry that stands wrongly, or the one before it, with a partner that lowers the violations.

    Where no partner lowers them, one that keeps their number is taken: that leads out of dead ends.
    """
    at -= int(draws.below(2, 1)[0])
    members = np.flatnonzero(group == group[at])
    partners = members[draws.below(len(members), min(len(members), _PARTNERS))]
    sideways = None
    for partner in partners.tolist():
        change = _swap(at, partner, pose, level, constraints)
        if change < 0:
            return
        _exchange(at, partner, pose, level)
        if change == 0 and (pose[at], level[at]) != (pose[partner], level[partner]):
            sideways = partner
    if sideways is not None:
        _exchange(at, sideways, pose, level)


def _exchange(at: int, partner: int, pose: IntArray, level: IntArray) -> None:
    for array in (pose, level):
        array[[at, partner]] = array[[partner, at]]


def _swap(at: int, partner: int, pose: IntArray, level: IntArray, constraints: Constraints) -> int:
    """Exchange two entries and return by how much the number of violations around them changed."""
    reach = 2 + (constraints.longest_run or 0)
    first, second = sorted((at, partner))
    windows = [slice(max(0, k - reach), k + reach + 1) for k in (first, second)]
    if windows[1].start < windows[0].stop:
        windows = [slice(windows[0].start, windows[1].stop)]
    before = sum(len(_violations(pose[w], level[w], constraints)) for w in windows)
    _exchange(at, partner, pose, level)
    return sum(len(_violations(pose[w], level[w], constraints)) for w in windows) - before


def sham_entries(pose: IntArray, share: float, seed: int) -> np.ndarray:
    """Return which entries are sham: balanced over poses (counts differ by at most one) and over time.

    Time is cut into as many stretches as there are sham entries; each gets one, by an assignment that keeps the quota
    of each pose and stays as near to its stretch as it can.

    Examples
    --------
    >>> int(sham_entries(np.tile(np.arange(5), 4), 0.25, 1).sum())
    5
    """
    from scipy.optimize import linear_sum_assignment

    total, poses = len(pose), int(pose.max()) + 1
    wanted = round(share * total)
    sham = np.zeros(total, dtype=bool)
    if not wanted:
        return sham
    draws = Draws(seed, "sham")
    quota = np.full(poses, wanted // poses)
    quota[draws.shuffled(poses)[: wanted % poses]] += 1
    if (quota > np.bincount(pose, minlength=poses)).any():
        raise InputError(f"order.sham_share: {share:g} asks for more sham visits at a pose than it has")
    slots = np.repeat(np.arange(poses), quota)
    middles = (np.arange(wanted) + 0.5) * total / wanted
    places = [np.flatnonzero(pose == p) for p in range(poses)]
    cost = np.array(
        [[np.abs(places[p] - middle).min() if len(places[p]) else total for p in slots] for middle in middles]
    )
    row, column = linear_sum_assignment(np.maximum(cost - total / wanted / 2, 0.0))
    for k in row[np.argsort(cost[row, column])]:
        free = places[slots[column[k]]]
        free = free[~sham[free]]
        offset = np.abs(free - middles[k])
        near = free[offset <= max(float(offset.min()), total / wanted / 2)]
        sham[near[draws.below(len(near), 1)[0]]] = True
    return sham
