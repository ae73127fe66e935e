"""The people of the demo: invented allotment gardeners, and who knows whom."""

import itertools
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Relation = Literal["follow", "friend", "mute", "block", "none"]

HOUR_MS = 3_600_000
DAY_MS = 24 * HOUR_MS
WEEK_MS = 7 * DAY_MS

# fmt: off
NAMES = (
    "mina", "joel", "nadia", "theo", "ines", "omar", "greta", "luca", "yusuf", "asha", "piet", "rosa", "kofi",
    "hana", "ivo", "leila", "bruno", "maren", "tomas", "wanda", "emil", "suki", "dario", "freya", "anton", "zola",
    "nils", "petra", "samir", "edda", "milo", "karin", "ravi", "lotte", "jonas", "amara", "felix", "noor", "oskar",
    "tilda", "hugo", "selma", "arvid", "beata", "iris", "malik", "vera", "otto",
)
TOPICS = (
    "beans", "compost", "slugs", "dahlias", "tomatoes", "pumpkins", "garlic", "herbs", "bees", "kale", "leeks",
    "roses", "sheds", "seeds", "apples", "weeds",
)
# fmt: on

_PLOTS_IN_A_ROW = 16
_INTERESTS = 3
_CHANCE_AT_DISTANCE = {1: 0.5, 2: 0.1}
_FAR_FRIENDS = 0.5
_TYPICAL_FOLLOWS = 11.0
_MOST_FOLLOWS = 60
_QUARRELS: dict[Relation, float] = {"mute": 0.10, "none": 0.05, "block": 0.03}


@dataclass(frozen=True, slots=True)
class Person:
    """A gardener.

    Args:
        id: first name and plot, such as `mina.plot17`.
        plot: number of the plot, from 1.
        interests: topics.
        popularity: how readily others follow, at least 1.
        energy: how much this person writes; 1 is usual.

    """

    id: str
    plot: int
    interests: tuple[str, ...]
    popularity: float
    energy: float


@dataclass(frozen=True, slots=True)
class Declaration:
    """A relation that was declared, and how long before the demo's start, milliseconds."""

    actor: str
    target: str
    relation: Relation
    age_ms: int


@dataclass(slots=True)
class Community:
    """Everybody, and every tie that was ever declared.

    Args:
        people: by plot.
        declarations: the later one of two between the same people stands.

    """

    people: list[Person]
    declarations: list[Declaration] = field(default_factory=list)

    def ties(self) -> dict[str, dict[str, Relation]]:
        """Give the relations that stand: by who declared them, then by whom they are about."""
        standing: dict[str, dict[str, Relation]] = {person.id: {} for person in self.people}
        for one in sorted(self.declarations, key=lambda one: -one.age_ms):
            standing[one.actor][one.target] = one.relation
        return standing


def settle(size: int, rng: np.random.Generator) -> Community:
    """Make a community: neighbours are friends, the popular are followed by many, a few have fallen out.

    Follows are heavy-tailed: popularity is drawn from a Pareto distribution. Friendships are clustered, as plots
    that lie close to each other share neighbours.

    Args:
        size: how many people.
        rng: where all chance comes from; it is advanced.

    """
    community = Community([_person(plot, rng) for plot in range(1, size + 1)])
    known = _befriend(community, rng)
    _follow(community, known, rng)
    _fall_out(community, known, rng)
    return community


def _person(plot: int, rng: np.random.Generator) -> Person:
    return Person(
        id=f"{NAMES[int(rng.integers(len(NAMES)))]}.plot{plot}",
        plot=plot,
        interests=tuple(TOPICS[int(place)] for place in rng.choice(len(TOPICS), _INTERESTS, replace=False)),
        popularity=float(min(1.0 + rng.pareto(1.5), 40.0)),
        energy=float(min(rng.lognormal(-0.3, 0.8), 6.0)),
    )


def _befriend(community: Community, rng: np.random.Generator) -> list[set[int]]:
    """Declare friendships in both directions; return whom each knows, by place."""
    known: list[set[int]] = [set() for _ in community.people]
    near = [(a, b, chance) for a, b, chance in _neighbours(len(known)) if rng.random() < chance]
    far = rng.integers(len(known), size=(int(len(known) * _FAR_FRIENDS), 2))
    for a, b in itertools.chain(((a, b) for a, b, _ in near), far.tolist()):
        if a == b or b in known[a]:
            continue
        known[a].add(b)
        known[b].add(a)
        _declare(community, a, b, "friend", _earlier(rng))
        _declare(community, b, a, "friend", _earlier(rng))
    return known


def _neighbours(size: int) -> list[tuple[int, int, float]]:
    """List each pair of close plots once, with the chance that they are friends."""
    pairs = []
    for place in range(size):
        row, column = divmod(place, _PLOTS_IN_A_ROW)
        for down, right in itertools.product(range(3), range(-2, 3)):
            other = (row + down) * _PLOTS_IN_A_ROW + column + right
            if place < other < size and 0 <= column + right < _PLOTS_IN_A_ROW:
                pairs.append((place, other, _CHANCE_AT_DISTANCE[max(down, abs(right))]))
    return pairs


def _follow(community: Community, known: list[set[int]], rng: np.random.Generator) -> None:
    appeal = np.array([person.popularity for person in community.people])
    shared = _shared_interests(community.people)
    for place in range(len(community.people)):
        chance = appeal * (1 + shared[place])
        chance[[place, *known[place]]] = 0.0
        wanted = int(np.clip(rng.lognormal(np.log(_TYPICAL_FOLLOWS), 0.6), 3, _MOST_FOLLOWS))
        for target in rng.choice(len(chance), wanted, replace=False, p=chance / chance.sum()).tolist():
            known[place].add(target)
            _declare(community, place, target, "follow", _earlier(rng))


def _shared_interests(people: list[Person]) -> NDArray[np.float64]:
    """Count the interests that each two share, shape (people, people)."""
    likes = np.array([[topic in person.interests for topic in TOPICS] for person in people], dtype=np.float64)
    shared: NDArray[np.float64] = likes @ likes.T
    return shared


def _fall_out(community: Community, known: list[set[int]], rng: np.random.Generator) -> None:
    """Let a few mute or part from somebody they know, and a few block somebody."""
    for place in range(len(known)):
        acquainted = sorted(known[place])
        for relation, chance in _QUARRELS.items():
            if rng.random() < chance:
                target = acquainted[int(rng.integers(len(acquainted)))]
                _declare(community, place, target, relation, int(rng.integers(HOUR_MS, WEEK_MS)))


def _earlier(rng: np.random.Generator) -> int:
    """Choose an age in the week before the week that the demo tells of."""
    return int(rng.integers(WEEK_MS, 2 * WEEK_MS))


def _declare(community: Community, actor: int, target: int, relation: Relation, age_ms: int) -> None:
    people = community.people
    community.declarations.append(Declaration(people[actor].id, people[target].id, relation, age_ms))
