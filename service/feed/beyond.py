"""Posts from beyond a reader's ties, where the policy asks for them: by the same score, only what everyone may see."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from scoring.affinity import BLOCK, MUTE, Circle
from scoring.edges import EDGE
from scoring.gathering import Reader
from scoring.policy import Policy
from service.feed.readers import ReaderState, hash_number
from service.feed.shortlist import Found, Shortlist
from service.feed.types import FeedRequest


def outsider(state: ReaderState, forms: Sequence[str] = (), topics: Sequence[str] = ()) -> Reader:
    """Make a reader whom ties open no audience, but whose mutes, and the blocks on both sides, hold.

    Args:
        state: the reader's own state.
        forms: only posts of one of these forms are found; all where there are none.
        topics: only posts with one of these topics; all where there are none.

    """
    known = state.known
    chosen = (known.relation == MUTE) | (known.relation == BLOCK)
    circle = Circle(known.person[chosen], known.relation[chosen], np.zeros(int(chosen.sum())))
    marks = np.frombuffer(state.marks, dtype=EDGE)
    blocks: bytes = marks[(marks["stamp"] & np.uint64(0xFFFF)) == BLOCK].tobytes()
    return Reader(hash_number(state.hash), circle, blocks, forms, topics)


def reader_of(state: ReaderState, circle: Circle, request: FeedRequest) -> Reader:
    """Make the reader of a feed."""
    return Reader(hash_number(state.hash), circle, state.marks, request.forms, request.topics)


@dataclass(frozen=True, slots=True)
class Places:
    """Which places of a page are for posts from beyond the ties.

    Args:
        policy: says their share, and whether they fill what ties leave empty.
        offset: how many posts the pages before have served.
        k: places of the page.

    """

    policy: Policy
    offset: int
    k: int

    def beyond(self, place: int) -> bool:
        """Say whether a place, counted over all pages from 0, is for a post from beyond: so many of every first n."""
        share = self.policy.beyond_share + 1e-12
        return int((place + 1) * share) > int(place * share)

    def wanted(self, ties: int) -> int:
        """Say how many posts from beyond a page can take that has so many by ties."""
        own = sum(self.beyond(place) for place in range(self.offset, self.offset + self.k))
        return max(own, self.k - ties) if self.policy.beyond_fill else own

    def mixed(self, ties: Sequence[Found], beyond: Sequence[Found]) -> list[Found]:
        """Put both in their places; where one kind runs out the other goes on, as far as the policy lets it."""
        page: list[Found] = []
        left, others = list(ties), list(beyond)
        while len(page) < self.k and (left or others):
            own = self.beyond(self.offset + len(page))
            if others and (own or (not left and self.policy.beyond_fill)):
                page.append(others.pop(0))
            elif left:
                page.append(left.pop(0))
            else:
                break
        return page


def surely(shortlist: Shortlist, need: int, unlisted: float, temperature: float) -> bool:
    """Say whether the best so many from beyond are certain.

    Args:
        shortlist: what was found among the posts that the board lists.
        need: how many are wanted.
        unlisted: what no other post's score is above.
        temperature: of the randomness: with any, posts that are not listed could stand anywhere.

    """
    if not need or (shortlist.exhausted and unlisted <= 0.0):
        return True
    if temperature or shortlist.certain < need or len(shortlist.found) < need:
        return False
    return unlisted * (1.0 + 1e-9) < shortlist.found[need - 1].order
