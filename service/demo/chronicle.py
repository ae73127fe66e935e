"""What happened on the allotments in the last week: posts, and what people did with them, as events."""

from collections import Counter
from dataclasses import dataclass
from typing import Any, Literal, TypeVar

import numpy as np
from numpy.typing import NDArray

from service.demo import rhythm
from service.demo.community import HOUR_MS, TOPICS, Community, Person, Relation, settle
from service.times import format_ms

AnyEvent = dict[str, Any]
Name = TypeVar("Name", bound=str)
Audience = Literal["everyone", "followers", "friends", "nobody"]

FORMS = {"video": 0.15, "photo": 0.5, "note": 0.35}
AUDIENCES: dict[Audience, float] = {"everyone": 0.8, "followers": 0.13, "friends": 0.06, "nobody": 0.01}
KINDS = {"like": 0.62, "comment": 0.18, "comment.photo": 0.06, "comment.question": 0.03, "share": 0.09, "hide": 0.02}

_POSTS_EACH = 3.0
_REACTIONS = 7.5
_DELAY_H = 1.2
_FRIENDS_COUNT = 3.0
_STRANGERS = 0.08
_RETRACTED, _WITHDRAWN = 0.012, 0.01
_LOOKS_EACH = 1.5
_SHOWN = 10


@dataclass(frozen=True, slots=True)
class Post:
    """A post of the week.

    Args:
        id: author, topic and a number, such as `mina.plot17-dahlias-3`.
        author: who wrote it.
        form: video, photo or note.
        audience: who may see it.
        age_ms: how long before the demo's start, milliseconds.
        withdrawn: whether it has been taken away since.

    """

    id: str
    author: str
    form: str
    topic: str
    audience: Audience
    age_ms: int
    withdrawn: bool


@dataclass(frozen=True, slots=True)
class Chronicle:
    """A community and its week.

    Args:
        community: people and ties.
        posts: by id.
        events: everything as events, oldest first.

    """

    community: Community
    posts: dict[str, Post]
    events: list[AnyEvent]


def write(people: int, seed: int, now_ms: int) -> Chronicle:
    """Make a community and its week; the same arguments give the same events.

    Args:
        people: how many.
        seed: of all chance.
        now_ms: where the week ends, Unix milliseconds. Another one moves all times and changes nothing else.

    """
    rng = np.random.default_rng(seed)
    community = settle(people, rng)
    pen = _Pen(now_ms)
    for one in community.declarations:
        pen.note("tie", one.age_ms, one.actor, target=one.target, relation=one.relation)
    posts = _publish(community, rng)
    for post in posts:
        pen.note("post", post.age_ms, post.author, **_content(post))
    ties = community.ties()
    _react(community, ties, posts, pen, rng)
    for post in posts:
        if post.withdrawn:
            pen.note("withdraw", int(post.age_ms * rng.random()), post.author, post=post.id)
    _look(community, ties, posts, pen, rng)
    return Chronicle(community, {post.id: post for post in posts}, pen.in_order())


class _Pen:
    """Writes events down."""

    def __init__(self, now_ms: int) -> None:
        self._now_ms = now_ms
        self._noted: list[tuple[int, AnyEvent]] = []

    def note(self, event_type: str, age_ms: int, actor: str, **fields: object) -> str:
        """Write an event down, and return its id."""
        name = f"week-{len(self._noted) + 1:05d}"
        at = format_ms(self._now_ms - age_ms)
        self._noted.append((age_ms, {"id": name, "type": event_type, "at": at, "actor": actor, **fields}))
        return name

    def in_order(self) -> list[AnyEvent]:
        """Give all events, oldest first."""
        return [event for _, event in sorted(self._noted, key=lambda noted: -noted[0])]


def _content(post: Post) -> AnyEvent:
    return {"post": post.id, "form": post.form, "audience": post.audience, "topics": [post.topic]}


def _publish(community: Community, rng: np.random.Generator) -> list[Post]:
    posts = []
    for person in community.people:
        written: Counter[str] = Counter()
        count = int(rng.poisson(_POSTS_EACH * person.energy))
        for age_ms in sorted(rhythm.ages_ms(count, rng).tolist(), reverse=True):
            post = _post(person, written, age_ms, rng)
            posts.append(post)
    return sorted(posts, key=lambda post: -post.age_ms)


def _post(person: Person, written: Counter[str], age_ms: int, rng: np.random.Generator) -> Post:
    topics = person.interests if rng.random() < 0.9 else TOPICS  # noqa: PLR2004  one post in ten is off their beat
    topic = topics[int(rng.integers(len(topics)))]
    written[topic] += 1
    return Post(
        id=f"{person.id}-{topic}-{written[topic]}",
        author=person.id,
        form=_one_of(FORMS, rng),
        topic=topic,
        audience=_one_of(AUDIENCES, rng),
        age_ms=age_ms,
        withdrawn=bool(rng.random() < _WITHDRAWN),
    )


def _one_of(chances: dict[Name, float], rng: np.random.Generator) -> Name:
    steps = np.cumsum(list(chances.values()))
    return list(chances)[int(np.searchsorted(steps, rng.random() * steps[-1], side="right"))]


def _react(
    community: Community,
    ties: dict[str, dict[str, Relation]],
    posts: list[Post],
    pen: _Pen,
    rng: np.random.Generator,
) -> None:
    """Let people react to posts: ties soon after posting, a few much later, and now and then a stranger."""
    popularity = {person.id: person.popularity for person in community.people}
    typical = float(np.mean(list(popularity.values())))
    for post in posts:
        crowd = _Crowd.around(post, ties)
        appeal = (popularity[post.author] / typical) ** 0.4 * float(rng.lognormal(-0.4, 0.9))
        for _ in range(int(rng.poisson(_REACTIONS * appeal))):
            stranger = post.audience == "everyone" and rng.random() < _STRANGERS
            actor = community.people[int(rng.integers(len(community.people)))].id if stranger else crowd.draw(rng)
            if actor is not None and actor != post.author:
                _react_once(post, actor, pen, rng)


def _react_once(post: Post, actor: str, pen: _Pen, rng: np.random.Generator) -> None:
    delay_ms = HOUR_MS * float(rng.lognormal(np.log(_DELAY_H), 1.5))
    age_ms = int(rhythm.out_of_the_night(post.age_ms - delay_ms, rng))
    if age_ms < 0:
        return
    name = pen.note("interaction", age_ms, actor, post=post.id, kind=_one_of(KINDS, rng))
    if rng.random() < _RETRACTED:
        pen.note("retract", int(age_ms * rng.random()), actor, event=name)


@dataclass(frozen=True, slots=True)
class _Crowd:
    """Those who may come across a post, friends of its author more often than others."""

    people: list[str]
    cumulated: NDArray[np.float64]

    @classmethod
    def around(cls, post: Post, ties: dict[str, dict[str, Relation]]) -> "_Crowd":
        people = [person for person in ties if _comes_across(post, person, ties)]
        befriended = [ties[person][post.author] == "friend" for person in people]
        return cls(people, np.cumsum(np.where(befriended, _FRIENDS_COUNT, 1.0)))

    def draw(self, rng: np.random.Generator) -> str | None:
        """Choose somebody; None where nobody comes across the post."""
        if not self.people:
            return None
        return self.people[int(np.searchsorted(self.cumulated, rng.random() * self.cumulated[-1], side="right"))]


def _comes_across(post: Post, person: str, ties: dict[str, dict[str, Relation]]) -> bool:
    declared = ties[post.author].get(person)
    if ties[person].get(post.author) not in ("follow", "friend") or declared == "block":
        return False
    return post.audience in ("everyone", "followers") or (post.audience == "friends" and declared == "friend")


def _look(
    community: Community,
    ties: dict[str, dict[str, Relation]],
    posts: list[Post],
    pen: _Pen,
    rng: np.random.Generator,
) -> None:
    """Let people see their feeds now and then: the newest posts by those they know."""
    for person in community.people:
        known = {target for target, relation in ties[person.id].items() if relation in ("follow", "friend")}
        for age_ms in rhythm.ages_ms(int(rng.poisson(_LOOKS_EACH)), rng).tolist():
            shown = [post.id for post in posts if post.age_ms > age_ms and post.author in known][-_SHOWN:]
            if shown:
                pen.note("seen", age_ms, person.id, posts=shown)
