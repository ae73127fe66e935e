"""The crowd's sums of posts, from their records."""

import numpy as np
from numpy.typing import NDArray

from scoring.crowd import raw_sums, running_sums
from scoring.ranking import Ranking
from service.store.kinds import CODE_MASK
from service.store.records import PostRecord, crowd_state


def crowd_sums(records: list[PostRecord], ranking: Ranking, t_ms: int) -> NDArray[np.float64]:
    """Compute the weighted, decayed sum over every edge of each post, shape (n,)."""
    state = crowd_state(records, len(ranking.bank.half_lives_ms))
    raw = raw_sums(state.edge_post, state.edge_stamp, len(records), ranking, t_ms)
    kinds = (state.kind_code & CODE_MASK).astype(np.intp)
    return raw + running_sums(state.kind_post, kinds, state.kind_as_of_ms, state.kind_sums, len(records), ranking, t_ms)
