"""Explanations in plain words."""

import pytest

from service.demo.answers import Explanation, Part
from service.demo.reasons import Reason, reasons, sentence
from tests.demo_samples import HOUR_MS, NOW_MS

RELATIONS = {"mina.plot17": "friend", "joel.plot3": "follow", "nadia.plot4": "follow"}


def part(actor: str, kind: str, product: float, age_h: float = 2.0) -> Part:
    """A part of a score."""
    return Part(actor, kind, NOW_MS - round(age_h * HOUR_MS), 1.0, 1.0, product)


def explained(*parts: Part) -> Explanation:
    """An explanation with these parts."""
    return Explanation("p", NOW_MS, sum(one.product for one in parts), list(parts))


@pytest.mark.parametrize(
    ("one", "text"),
    [
        (part("mina.plot17", "post.photo", 5.0), "a friend posted it"),
        (part("joel.plot3", "post.note", 5.0), "you follow the author"),
        (part("ivo.plot9", "post.note", 5.0), "you know the author"),
        (part("mina.plot17", "comment.photo", 5.0, 0.0), "friend mina.plot17 commented just now"),
        (part("joel.plot3", "share", 5.0, 0.5), "joel.plot3 shared it 30 min ago"),
        (part("ivo.plot9", "like", 5.0, 72.0), "acquaintance ivo.plot9 liked it 3 d ago"),
        (part("", "", 5.0), "everybody else"),
    ],
)
def test_one_reason(one: Part, text: str) -> None:
    """A part says who did what and when, and how the reader stands to them."""
    assert reasons(explained(one), RELATIONS) == [Reason(text, 5.0)]  # type: ignore[arg-type]


def test_acts_of_one_sort_are_told_together() -> None:
    """Acts of one sort by people of one relation are one reason; the strongest comes first and the points add up."""
    found = reasons(
        explained(
            part("joel.plot3", "comment", 1.0),
            part("mina.plot17", "comment", 2.5),
            part("nadia.plot4", "comment.photo", 2.0),
            part("", "", 0.25),
            part("ivo.plot9", "hide", 0.0),
        ),
        RELATIONS,  # type: ignore[arg-type]
    )
    assert found == [
        Reason("2 comments by people you follow", 3.0),
        Reason("friend mina.plot17 commented 2 h ago", 2.5),
        Reason("everybody else", 0.25),
    ]


def test_sentence_leaves_out_what_rounds_to_nothing() -> None:
    """Points that would be shown as +0.0 are not told, unless there are no others."""
    assert sentence([Reason("you follow the author", 6.3), Reason("everybody else", 0.04)], 70) == (
        "you follow the author +6.3"
    )
    assert sentence([Reason("everybody else", 0.04)], 70) == "everybody else +0.0"
    assert sentence([], 70) == ""


def test_sentence_keeps_the_strongest_reason_however_narrow() -> None:
    """Where nothing fits, the strongest reason is told all the same."""
    assert sentence([Reason("a friend posted it", 5.0), Reason("everybody else", 1.0)], 10) == (
        "a friend posted it +5.0, more +1.0"
    )
