"""A running sum that decays without being touched: the slow and obvious reference.

The store keeps many of these at once; this one is the yardstick they are held against. It is forward decay with an
exponential (Cormode, Shkapenyuk, Srivastava and Xu, "Forward Decay: A Practical Time Decay Model for Streaming
Systems", ICDE 2009).
"""

from dataclasses import dataclass


@dataclass(slots=True)
class DecayedSum:
    """Sum of weights that each halve with every half-life of age.

    The state is a value and the time it was true at, which is the time of the newest event. Because every weight decays
    by the same factor over the same span, a late event can be decayed to that time and added: the order of arrival
    does not change the sum, except in the last bits.

    Attributes:
        half_life_ms: Milliseconds, positive.
        as_of_ms: Unix milliseconds of the newest event, None before the first.
        value: The sum at ``as_of_ms``.

    >>> likes = DecayedSum(half_life_ms=1000.0)
    >>> likes.update(5000, 1.0)
    >>> likes.update(6000, 1.0)
    >>> likes.get(6000), likes.get(7000)
    (1.5, 0.75)
    >>> likes.update(4000, 4.0)
    >>> likes.get(6000)
    2.5
    >>> likes.undo(5000, 1.0)
    >>> likes.get(6000)
    2.0
    """

    half_life_ms: float
    as_of_ms: int | None = None
    value: float = 0.0

    def update(self, event_ms: int, weight: float) -> None:
        """Add an event, in any order.

        Args:
            event_ms: When it happened, Unix milliseconds.
            weight: What it is worth at age 0.
        """
        if self.as_of_ms is None or event_ms >= self.as_of_ms:
            self.value = self._at(event_ms) + weight
            self.as_of_ms = event_ms
        else:
            self.value += weight * self._decay(self.as_of_ms - event_ms)

    def undo(self, event_ms: int, weight: float) -> None:
        """Take back an event that was added with the same time and weight.

        The sum is again what it was without the event, to rounding; ``as_of_ms`` stays.
        """
        self.update(event_ms, -weight)

    def merge(self, other: "DecayedSum") -> None:
        """Add all of another sum's events.

        Args:
            other: A sum of the same half-life over other events; it is left as it was.

        Raises:
            ValueError: If the half-lives differ.
        """
        if other.half_life_ms != self.half_life_ms:
            raise ValueError(
                f"half_life_ms: {other.half_life_ms} is not allowed: "
                f"only a sum of half-life {self.half_life_ms} can be added"
            )
        if other.as_of_ms is not None:
            self.update(other.as_of_ms, other.value)

    def get(self, now_ms: int) -> float:
        """Return the sum at a time, and change nothing.

        An event ahead of the caller's clock has no age yet. It is read at its own time, where its freshness is 1, or
        later.

        Args:
            now_ms: Unix milliseconds, not before the newest event.

        Returns:
            The decayed sum; 0.0 before the first event.

        Raises:
            ValueError: If the newest event is later than now_ms: what had been summed by then is not kept.
        """
        if self.as_of_ms is not None and now_ms < self.as_of_ms:
            raise ValueError(f"now_ms: {now_ms} is not allowed: it is {self.as_of_ms}, the newest event, or later")
        return self._at(now_ms)

    def _at(self, now_ms: int) -> float:
        return 0.0 if self.as_of_ms is None else self.value * self._decay(now_ms - self.as_of_ms)

    def _decay(self, age_ms: int) -> float:
        return float(2.0 ** (-age_ms / self.half_life_ms))
