"""Puts an explanation into plain words: who did what, and the points that it gave."""

from collections.abc import Mapping
from dataclasses import dataclass

from service.demo.answers import Explanation, Part
from service.demo.community import Relation

_MINUTE_MS = 60_000
# Fewer are rounded away.
_SEEN_POINTS = 0.05
_ACTS = {
    "like": ("liked it", "likes"),
    "comment": ("commented", "comments"),
    "share": ("shared it", "shares"),
}
_AUTHOR = {"friend": "a friend posted it", "follow": "you follow the author"}
_ONE = {"friend": "friend ", "follow": "", "none": "acquaintance "}
_MANY = {"friend": "friends", "follow": "people you follow", "none": "acquaintances"}


@dataclass(frozen=True, slots=True)
class Reason:
    """Something that gave a post points."""

    text: str
    points: float


def reasons(explanation: Explanation, relations: Mapping[str, Relation]) -> list[Reason]:
    """List what gave a post its score, the strongest first; the points add up to the score.

    Args:
        explanation: of the score.
        relations: the reader's, by person.

    """
    groups: dict[tuple[str, str], list[Part]] = {}
    for part in explanation.parts:
        groups.setdefault(_group(part, relations), []).append(part)
    found = [
        Reason(_text(stem, relation, parts, explanation.as_of_ms), sum(part.product for part in parts))
        for (stem, relation), parts in groups.items()
    ]
    return sorted((one for one in found if one.points > 0), key=lambda one: -one.points)


def sentence(found: list[Reason], width: int) -> str:
    """Join reasons into one line, the strongest first; what does not fit becomes `more`.

    Args:
        found: the reasons.
        width: the most characters.

    >>> found = [Reason("friend mina.plot17 shared it 2 h ago", 5.2), Reason("3 likes by friends", 1.4)]
    >>> sentence(found, 70)
    'friend mina.plot17 shared it 2 h ago +5.2, 3 likes by friends +1.4'
    >>> sentence(found, 60)
    'friend mina.plot17 shared it 2 h ago +5.2, more +1.4'

    """
    found = [one for one in found if one.points >= _SEEN_POINTS] or found[:1]
    for shown in range(len(found), 0, -1):
        rest = sum(one.points for one in found[shown:])
        told = found[:shown] + ([Reason("more", rest)] if found[shown:] else [])
        text = ", ".join(f"{one.text} +{one.points:.1f}" for one in told)
        if len(text) <= width or shown == 1:
            return text
    return ""


def age_in_words(age_ms: int) -> str:
    """Say an age shortly.

    >>> [age_in_words(minutes * 60_000) for minutes in (0, 25, 150, 3_000)]
    ['now', '25 min', '2 h', '2 d']

    """
    minutes = age_ms // _MINUTE_MS
    hours, days = minutes // 60, minutes // 1_440
    if days > 1:
        return f"{days} d"
    return f"{hours} h" if hours else f"{minutes} min" if minutes > 0 else "now"


def _group(part: Part, relations: Mapping[str, Relation]) -> tuple[str, str]:
    """Sort a part by what was done and by the relation to who did it; both are empty for the crowd."""
    relation = relations.get(part.actor, "none") if part.actor else ""
    return part.kind.partition(".")[0], relation


def _text(stem: str, relation: str, parts: list[Part], as_of_ms: int) -> str:
    if not stem:
        return "everybody else"
    if stem == "post":
        return _AUTHOR.get(relation, "you know the author")
    one, many = _ACTS.get(stem, (f"acted ({stem})", f"acts ({stem})"))
    if len(parts) > 1:
        return f"{len(parts)} {many} by {_MANY.get(relation, 'others')}"
    age = age_in_words(as_of_ms - parts[0].at_ms)
    when = "just now" if age == "now" else f"{age} ago"
    return f"{_ONE.get(relation, '')}{parts[0].actor} {one} {when}"
