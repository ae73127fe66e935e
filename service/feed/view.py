"""What a feed is ranked from."""

from dataclasses import dataclass

from scoring.affinity import Circle
from scoring.edges import EdgeRows, join_rows, live
from scoring.ranking import Ranking
from service.feed.policies import PreparedPolicy
from service.feed.readers import ReaderState, Standing


@dataclass(frozen=True, slots=True)
class View:
    """All that a reader's feed is ranked from.

    `rows` are those of the first people of the standing; `whole` is False where the deadline passed before all came.
    """

    reader: ReaderState
    standing: Standing
    rows: list[bytes]
    prepared: PreparedPolicy
    whole: bool

    @property
    def ranking(self) -> Ranking:
        """The compiled policy."""
        return self.prepared.ranking

    @property
    def circle(self) -> Circle:
        """The reader's circle."""
        return self.standing.circle

    def edges(self) -> EdgeRows:
        """Decode the edges that count; `row` is the place of the actor in the circle."""
        joined = join_rows(self.rows)
        return live(EdgeRows(joined.post, joined.stamp, self.standing.order[joined.row]))
