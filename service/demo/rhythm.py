"""When gardeners are about: by day more than by night, at the weekend more than in the week.

The demo always begins on a Sunday at five in the afternoon, allotment time, whatever the clock says: so the same
seed gives the same feed at any hour.
"""

import numpy as np
from numpy.typing import NDArray

from service.demo.community import HOUR_MS, WEEK_MS

_START_HOUR = 17
_WEEKEND = 1.7
_NIGHT = 0.15
_HOURS = WEEK_MS // HOUR_MS
# Of each hour of a day: few at night, a peak before noon and one after tea.
_NIGHT_HOURS = (0.02, 0.01, 0.01, 0.01, 0.02, 0.1)
_MORNING_HOURS = (0.4, 0.7, 0.9, 1.1, 1.2, 1.0)
_AFTERNOON_HOURS = (0.8, 0.7, 0.8, 0.9, 1.1, 1.3)
_EVENING_HOURS = (1.4, 1.2, 0.9, 0.6, 0.3, 0.1)
_DAY = np.array([*_NIGHT_HOURS, *_MORNING_HOURS, *_AFTERNOON_HOURS, *_EVENING_HOURS])


def hour_of_day(age_ms: float) -> int:
    """Tell the hour of the day, allotment time, at an age in milliseconds before the demo's start.

    >>> hour_of_day(0), hour_of_day(2 * 3_600_000), hour_of_day(18 * 3_600_000 - 1)
    (17, 15, 23)

    """
    return int((_START_HOUR - age_ms / HOUR_MS) // 1) % 24


def ages_ms(count: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Draw moments of the last week.

    Args:
        count: how many.
        rng: where chance comes from; it is advanced.

    Returns:
        Ages, milliseconds, shape (count,), from 0 to a week.

    """
    hours = rng.choice(_HOURS, count, p=_weights())
    return hours * HOUR_MS + rng.integers(HOUR_MS, size=count)


def out_of_the_night(age_ms: float, rng: np.random.Generator) -> float:
    """Put off to the morning what would happen at night."""
    while _DAY[hour_of_day(age_ms)] < _NIGHT:
        age_ms -= HOUR_MS * (1 + float(rng.exponential(0.5)))
    return age_ms


def _weights() -> NDArray[np.float64]:
    """Weigh each hour of the week by its age in hours."""
    weights = np.array([_DAY[(_START_HOUR - 1 - age) % 24] for age in range(_HOURS)])
    # Back from Sunday afternoon: what is left of Sunday, and Saturday.
    weights[: _START_HOUR + 24] *= _WEEKEND
    normal: NDArray[np.float64] = weights / weights.sum()
    return normal
