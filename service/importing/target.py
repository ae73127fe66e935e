"""An engine as an import needs it."""

from collections.abc import Callable, Coroutine, Sequence
from typing import Any

import numpy as np

from service.engine import Engine
from service.events.model import AnyEvent
from service.store.bulk import Outcomes
from service.store.bulk_columns import Edges
from service.store.ingest import verdict_of
from service.store.verdict import Verdict

Run = Callable[[Coroutine[Any, Any, Any]], Any]


class EngineTarget:
    """Applies events to an engine's store.

    Args:
        engine: started.
        run: runs a coroutine to its end.

    """

    def __init__(self, engine: Engine, run: Run) -> None:
        self._engine = engine
        self._run = run
        self.retention_ms = engine.store.limits.retention_ms

    def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events one by one; see `Engine.apply`."""
        verdicts: list[Verdict] = self._run(self._engine.apply(events, now_ms))
        return verdicts

    def apply_edges(self, edges: Edges, now_ms: int) -> tuple[Outcomes, dict[int, Verdict]]:
        """Apply interactions at once; see `service.store.bulk.BulkIngest.apply`."""
        outcomes: Outcomes = self._run(self._engine.store.bulk.apply(edges, now_ms))
        found = np.unique(outcomes).tolist()
        return outcomes, {outcome: verdict_of(outcome, self._engine.store.limits) for outcome in found}

    def kind_codes(self, kinds: Sequence[str]) -> list[int]:
        """Register kinds; give the code of each, -1 for those that no policy knows or the store has no room for."""
        codes: list[int] = self._run(self._engine.store.kind_codes(kinds))
        return codes
