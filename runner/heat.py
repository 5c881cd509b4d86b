"""How warm the contact face gets: first-order model, constants from the coil file.

Each pulse adds a rise proportional to the square of its output; between pulses the face goes exponentially towards skin
temperature. Degrees Celsius.
"""

from __future__ import annotations

import numpy as np
from coilwright.geometry.coil import Heat
from coilwright.geometry.frames import FloatArray

from .schedule import MILLI, US, Schedule

# Longest stretch, in time constants, that is summed at once: exp of it stays far from overflow.
_STRETCH = 30.0


def temperatures(schedule: Schedule, heat: Heat, *, skin_c: float, start_c: float | None = None) -> FloatArray:
    """Return the temperature of the contact face right after each pulse, shape (N,), C.

    Parameters
    ----------
    schedule : Schedule
    heat : Heat
    skin_c : float
        What the face goes towards when nothing is fired; the room, where that is warmer.
    start_c : float, optional
        At the first pulse; the coil file's if left out.

    Examples
    --------
    >>> from coilwright.geometry.coil import Heat
    >>> one = Schedule([0], [0], [100_000], [0], [0], ("a",), None)
    >>> heat = Heat(start_c=22.0, rise_per_full_pulse_c=0.5, cooling_s=600.0)
    >>> temperatures(one, heat, skin_c=33.0).tolist()
    [22.5]
    """
    start = heat.start_c if start_c is None else start_c
    towards = max(skin_c, heat.start_c)
    rise = heat.rise_per_full_pulse_c * (schedule.output_milli / (100 * MILLI)) ** 2
    time = schedule.onset_us / US / heat.cooling_s
    result = np.empty(len(schedule))
    above, at, last = start - towards, 0, 0.0
    while at < len(result):
        stop = int(np.searchsorted(time, time[at] + _STRETCH, side="right"))
        since = time[at:stop] - time[at]
        carried = above * np.exp(-(time[at] - last))
        part = np.exp(-since) * (carried + np.cumsum(rise[at:stop] * np.exp(since)))
        result[at:stop] = part + towards
        above, last, at = float(part[-1]), float(time[stop - 1]), stop
    return result
