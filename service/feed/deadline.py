"""How long a ranking may still take."""

import time
from dataclasses import dataclass, field


@dataclass(slots=True)
class Deadline:
    """A budget that runs from the arrival of a request, and the time of each stage.

    Args:
        budget_ms: time in all, milliseconds.
        arrived_s: `time.perf_counter()` when the request arrived.

    """

    budget_ms: float
    arrived_s: float
    stages_ms: dict[str, float] = field(default_factory=dict)
    _mark_s: float = 0.0

    def __post_init__(self) -> None:
        self._mark_s = time.perf_counter()

    def passed(self, share: float = 1.0) -> bool:
        """Say whether the budget, or a share of it, is used up."""
        return (time.perf_counter() - self.arrived_s) * 1000 >= share * self.budget_ms

    def stage(self, name: str) -> None:
        """Book the time since the last stage under a name."""
        now_s = time.perf_counter()
        self.stages_ms[name] = self.stages_ms.get(name, 0.0) + (now_s - self._mark_s) * 1000
        self._mark_s = now_s
