"""Policy files: the example, the defaults, the round trip, and every way of being refused."""

import json
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import service
from scoring.curves import HalfLife, Power
from scoring.durations import format_ms, parse_ms
from scoring.policy import AffinityRule, Policy, PolicyError, parse_policy, to_toml
from scoring.toml_lines import key_lines

HOUR_MS = 3_600_000.0
DAY_MS = 86_400_000.0
BUILT_IN = Path(service.__file__).parent / "policies" / "allotments.toml"
PLAIN = 'name = "plain"\n[weights]\nlike = 0.5\n'


def problems(text: str) -> list[str]:
    """Return what is said about a policy that is refused."""
    with pytest.raises(PolicyError) as refusal:
        parse_policy(text)
    return str(refusal.value).splitlines()


def only_problem(text: str) -> str:
    """Return the one thing that is said about a policy that is refused."""
    (problem,) = problems(text)
    return problem


def test_the_built_in_policy_is_the_example() -> None:
    """The file that comes with the service holds the documented values."""
    assert parse_policy(BUILT_IN.read_text(encoding="utf-8")) == Policy(
        name="allotments",
        weights={
            "post.video": 6.0,
            "post.photo": 3.0,
            "post.note": 1.5,
            "comment": 1.0,
            "comment.photo": 2.0,
            "share": 2.0,
            "like": 0.5,
            "hide": 0.0,
        },
        curve=HalfLife(12 * HOUR_MS),
        affinity=AffinityRule(
            stranger=0.02,
            follow=1.0,
            friend=2.0,
            ceiling=10.0,
            half_life_ms=30 * DAY_MS,
            gains={"like": 0.1, "comment": 0.3, "share": 0.5, "hide": -1.0},
        ),
        temperature=0.0,
        author_gap=0,
        seen_factor=1.0,
    )


def test_what_a_file_leaves_out_is_as_in_the_built_in_policy() -> None:
    """A name and one weight make a policy; the rest has the built-in values."""
    built_in = parse_policy(BUILT_IN.read_text(encoding="utf-8"))
    assert parse_policy(PLAIN) == replace(built_in, name="plain", weights={"like": 0.5})


def test_a_table_may_set_some_of_its_settings() -> None:
    """Settings that an affinity table leaves out keep their built-in values, the gains among them."""
    policy = parse_policy(PLAIN + "[affinity]\nfriend = 3\n")
    assert policy.affinity == replace(AffinityRule(), friend=3.0)
    assert isinstance(policy.affinity.friend, float)


def test_a_table_of_gains_replaces_the_built_in_gains() -> None:
    """Gains are listed whole: a table of one gain is one gain, and an empty one none."""
    assert parse_policy(PLAIN + "[affinity.gain]\nshare = -2\n").affinity.gains == {"share": -2.0}
    assert parse_policy(PLAIN + "[affinity.gain]\n").affinity.gains == {}


def test_a_power_curve_is_read() -> None:
    """Curve power has a scale and an exponent."""
    policy = parse_policy(PLAIN + '[freshness]\ncurve = "power"\nscale = "6h"\nexponent = 1.5\n')
    assert policy.curve == Power(6 * HOUR_MS, 1.5)


def test_curve_half_life_need_not_be_named() -> None:
    """A freshness table with a half-life alone is a half-life curve."""
    assert parse_policy(PLAIN + '[freshness]\nhalf_life = "1.5d"\n').curve == HalfLife(1.5 * DAY_MS)


def test_kinds_fall_back_to_their_stems() -> None:
    """Weights and gains of a dotted kind come from its longest listed stem, and are 0 where there is none."""
    policy = parse_policy(BUILT_IN.read_text(encoding="utf-8"))
    assert [policy.weight(kind) for kind in ("comment.photo.x", "comment.note", "hide", "wave")] == [2.0, 1.0, 0.0, 0.0]
    assert [policy.gain(kind) for kind in ("comment.photo", "hide.topic", "post.photo")] == [0.3, -1.0, 0.0]


def test_a_kind_is_known_by_its_weight_be_it_zero() -> None:
    """A kind with weight 0 is known, one with a gain only is not, and a stem of a listed kind is not."""
    policy = parse_policy(PLAIN + "hide = 0\n'post.photo' = 1\n[affinity.gain]\nwave = 1\n")
    assert [policy.knows(kind) for kind in ("like", "like.x", "hide", "post.photo")] == [True] * 4
    assert [policy.knows(kind) for kind in ("post", "post.note", "wave", "")] == [False] * 4
    assert policy.known_kinds() == ("hide", "like", "post.photo")


def test_weights_and_gains_come_as_arrays() -> None:
    """One finite number for each kind asked for, 0 where the policy has none."""
    policy = parse_policy(BUILT_IN.read_text(encoding="utf-8"))
    kinds = ["like", "wave", "comment.photo.x", "hide"]
    assert policy.weights_for(kinds).tolist() == [0.5, 0.0, 2.0, 0.0]
    assert policy.gains_for(kinds).tolist() == [0.1, 0.0, 0.3, -1.0]
    assert policy.weights_for([]).shape == (0,)
    assert policy.weights_for([]).dtype == policy.gains_for([]).dtype == np.float64


@pytest.mark.parametrize(
    ("added", "expected"),
    [
        ("hug = -1", "line 4: weights.hug: -1 is not allowed: a weight is 0 or more"),
        ("hug = nan", "line 4: weights.hug: nan is not allowed: a weight is 0 or more"),
        ("hug = inf", "line 4: weights.hug: inf is not allowed: a weight is 0 or more"),
        ("hug = true", "line 4: weights.hug: true is not allowed: a weight is 0 or more"),
        ('hug = "1"', 'line 4: weights.hug: "1" is not allowed: a weight is 0 or more'),
        ("hug = 1" + "0" * 400, "line 4: weights.hug: a number that large is not allowed: a weight is 0 or more"),
        ("hug = [1]", "line 4: weights.hug: [1] is not allowed: a weight is 0 or more"),
        ("hug = 2026-05-04", 'line 4: weights.hug: "2026-05-04" is not allowed: a weight is 0 or more'),
        ("post.photo = 3.0", "line 4: weights.post: a table is not allowed: a dotted kind stands in quotes, like"),
        (
            '"a b" = 1',
            'line 4: weights."a b": is not the name of a kind: words of letters, digits, _ and - joined by dots',
        ),
        ('"" = 1', 'line 4: weights."": is not the name of a kind'),
        (f"{'k' * 65} = 1", f"line 4: weights.{'k' * 65}: is not the name of a kind"),
        ("[affinity.gain]\nhug = nan", "line 5: affinity.gain.hug: nan is not allowed: a gain is a finite number"),
        (
            "[affinity.gain]\nhug = -inf",
            "line 5: affinity.gain.hug: -inf is not allowed: a gain is a finite number",
        ),
        ("[affinity.gain]\n'x.' = 1", 'line 5: affinity.gain."x.": is not the name of a kind'),
        ("[affinity]\ngain = 1", "line 5: affinity.gain: 1 is not allowed: it is a table"),
        ("[affinity]\nstranger = -0.1", "line 5: affinity.stranger: -0.1 is not allowed: an affinity is 0 or more"),
        ("[affinity]\nfollow = nan", "line 5: affinity.follow: nan is not allowed: an affinity is 0 or more"),
        ("[affinity]\nfriend = false", "line 5: affinity.friend: false is not allowed: an affinity is 0 or more"),
        ("[affinity]\nceiling = 0", "line 5: affinity.ceiling: 0 is not allowed: the ceiling is above 0"),
        (
            "[affinity]\nhalf_life = 30",
            "line 5: affinity.half_life: 30 is not allowed: a duration is a number above 0 with",
        ),
        (
            "[affinity]\nfamily = 1",
            "line 5: affinity.family: is not known: allowed here are stranger, follow, friend, ceiling,",
        ),
        (
            '[freshness]\nhalf_life = "0h"',
            'line 5: freshness.half_life: "0h" is not allowed: a duration is a number above 0',
        ),
        ('[freshness]\nhalf_life = "-1h"', 'line 5: freshness.half_life: "-1h" is not allowed: a duration is'),
        ('[freshness]\nhalf_life = "12 h"', 'line 5: freshness.half_life: "12 h" is not allowed: a duration is'),
        ('[freshness]\nhalf_life = "2w"', 'line 5: freshness.half_life: "2w" is not allowed: a duration is'),
        ("[freshness]", "line 4: freshness.half_life: is missing: curve half_life needs it"),
        ('[freshness]\ncurve = "half_life"', "line 4: freshness.half_life: is missing: curve half_life needs it"),
        ('[freshness]\ncurve = "power"\nscale = "1h"', "line 4: freshness.exponent: is missing: curve power needs it"),
        ('[freshness]\ncurve = "power"\nexponent = 1', "line 4: freshness.scale: is missing: curve power needs it"),
        (
            '[freshness]\ncurve = "power"\nexponent = 1\nscale = "1h"\nhalf_life = "1h"',
            "line 8: freshness.half_life: is not allowed with curve power: it has scale and exponent",
        ),
        (
            '[freshness]\nhalf_life = "1h"\nexponent = 1',
            "line 6: freshness.exponent: is not allowed with curve half_life: it has half_life",
        ),
        (
            '[freshness]\ncurve = "power"\nscale = "1h"\nexponent = 0',
            "line 7: freshness.exponent: 0 is not allowed: an exponent is above 0",
        ),
        (
            '[freshness]\ncurve = "linear"\nhalf_life = "1h"',
            'line 5: freshness.curve: "linear" is not allowed: it is one of half_life, power',
        ),
        (
            "[freshness]\nhalf_life = '1h'\nfloor = 0",
            "line 6: freshness.floor: is not known: allowed here are curve, half_life,",
        ),
        ("[explore]\ntemperature = -1", "line 5: explore.temperature: -1 is not allowed: a temperature is 0 to 20"),
        ("[explore]\ntemperature = 21", "line 5: explore.temperature: 21 is not allowed: a temperature is 0 to 20"),
        ("[explore]\nheat = 1", "line 5: explore.heat: is not known: allowed here are temperature"),
        (
            "[arrange]\nauthor_gap = 51",
            "line 5: arrange.author_gap: 51 is not allowed: an author gap is a whole number from 0 to 50",
        ),
        (
            "[arrange]\nauthor_gap = 1.0",
            "line 5: arrange.author_gap: 1.0 is not allowed: an author gap is a whole number",
        ),
        (
            "[arrange]\nauthor_gap = true",
            "line 5: arrange.author_gap: true is not allowed: an author gap is a whole number",
        ),
        ("[seen]\nfactor = 1.5", "line 5: seen.factor: 1.5 is not allowed: a factor is from 0 to 1"),
        ("[seen]\nfactor = nan", "line 5: seen.factor: nan is not allowed: a factor is from 0 to 1"),
        (
            "[extra]\nx = 1",
            "line 4: extra: is not known: allowed here are name, weights, freshness, affinity, explore,",
        ),
        ("[[affinity]]\nfollow = 1", 'line 4: affinity: [{"follow": 1}] is not allowed: it is a table'),
    ],
)
def test_a_wrong_setting_is_named_with_its_line(added: str, expected: str) -> None:
    """The refusal names line, setting, value and what is allowed, and nothing else."""
    problem = only_problem(PLAIN + added + "\n")
    assert problem.startswith(expected)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ('name = "x"\n', "weights: is missing or empty: a policy gives at least one kind a weight"),
        (
            'name = "x"\n\n[weights]\n',
            "line 3: weights: is missing or empty: a policy gives at least one kind a weight",
        ),
        ('name = "x"\nweights = 3\n', "line 2: weights: 3 is not allowed: it is a table"),
        ("[weights]\nlike = 1\n", "name: is missing: every policy has a name"),
        (
            'name = ""\n[weights]\nlike = 1\n',
            'line 1: name: "" is not allowed: a name has 1 to 64 of a-z, 0-9, _ and -',
        ),
        ('name = "Beds"\n[weights]\nlike = 1\n', 'line 1: name: "Beds" is not allowed: a name has'),
        ('name = "a\\n"\n[weights]\nlike = 1\n', 'line 1: name: "a\\n" is not allowed: a name has'),
        (f'name = "{"a" * 65}"\n[weights]\nlike = 1\n', 'line 1: name: "aaaa'),
        ("name = 7\n[weights]\nlike = 1\n", "line 1: name: 7 is not allowed: a name has"),
    ],
)
def test_name_and_weights_are_required(text: str, expected: str) -> None:
    """A policy without a proper name, or without a weight, is refused."""
    assert only_problem(text).startswith(expected)


def test_all_problems_are_told_at_once_in_order_of_lines() -> None:
    """One reading of a file shows everything that is wrong with it."""
    text = 'name = "Beds"\n[weights]\nlike = -1\nshare = nan\n[seen]\nfactor = 2\n[weihgts]\n'
    text += '[explore]\ntemperature = "hot"\n'
    with pytest.raises(PolicyError) as refusal:
        parse_policy(text)
    found = [(problem.line, problem.field) for problem in refusal.value.problems]
    assert found == [
        (1, "name"),
        (3, "weights.like"),
        (4, "weights.share"),
        (6, "seen.factor"),
        (7, "weihgts"),
        (9, "explore.temperature"),
    ]
    assert (refusal.value.line, refusal.value.field) == (1, "name")
    assert refusal.value.reason.startswith('"Beds" is not allowed')


@pytest.mark.parametrize(
    ("text", "line"),
    [
        ('name = "x"\n[weights\nlike = 1\n', 2),
        ('name = "x"\n[weights]\nlike = \n', 3),
        ('name = "x"\n[weights]\nlike = 1\nlike = 2\n', 4),
        ('name = "x"\n[weights]\ncomment = 1.0\ncomment.photo = 2.0\n', 4),
        ('name = "x"\n[weights]\nlike = """open\n\n', 3),
        ("\x00", 1),
    ],
)
def test_what_is_no_toml_is_refused_with_its_line(text: str, line: int) -> None:
    """A syntax error, a key given twice and an open end are told with their line."""
    with pytest.raises(PolicyError, match="not TOML") as refusal:
        parse_policy(text)
    assert (refusal.value.line, refusal.value.field) == (line, None)


@pytest.mark.parametrize("text", ["a = " + "[" * 5_000 + "]" * 5_000, "a = " + "9" * 10_000])
def test_hostile_toml_is_refused_like_any_other(text: str) -> None:
    """Deep nesting and endless digits end in a refusal."""
    with pytest.raises(PolicyError):
        parse_policy(text)


def test_lines_are_found_through_strings_arrays_and_comments() -> None:
    """What looks like a key inside a value or a comment moves no line."""
    text = """# name = "no"
name = '''
[weights]
like = 7
'''
tags = [ # like = 1
  "[seen]", 'x # y',
  "a\\"]b",
]
[ weights ]   # [seen]
like = 0.5
"post.photo" . 'x' = 1
"\\u0062eans" = 2
[affinity]
gain = { like = 1, "a.b" = 2 }
[[rows]]
x.y.z = \"""
k = 1\"""
[[rows]]
"""
    assert tomllib.loads(text)["weights"]["beans"] == 2
    assert key_lines(text) == {
        ("name",): 2,
        ("tags",): 6,
        ("weights",): 10,
        ("weights", "like"): 11,
        ("weights", "post.photo"): 12,
        ("weights", "post.photo", "x"): 12,
        ("weights", "beans"): 13,
        ("affinity",): 14,
        ("affinity", "gain"): 15,
        ("rows",): 16,
        ("rows", "x"): 17,
        ("rows", "x", "y"): 17,
        ("rows", "x", "y", "z"): 17,
    }


def test_line_ends_of_other_systems_count_once() -> None:
    """A file with carriage returns has the same line numbers."""
    assert only_problem(PLAIN.replace("\n", "\r\n") + "share = -1\r\n").startswith("line 4: weights.share: -1")


def test_settings_inside_an_inline_table_have_its_line() -> None:
    """A problem inside a table written in one line is told with that line."""
    text = 'name = "x"\nweights = { like = 1 }\naffinity = { gain = { like = nan } }\n'
    assert only_problem(text).startswith("line 3: affinity.gain.like: nan is not allowed")


kinds = st.from_regex(r"[a-zA-Z0-9_-]{1,8}(\.[a-z]{1,8}){0,2}", fullmatch=True)
amounts = st.floats(min_value=0.0, max_value=1e9)
spans_ms = st.floats(min_value=1.0, max_value=1e12)
policies = st.builds(
    Policy,
    name=st.from_regex(r"[a-z0-9][a-z0-9_-]{0,63}", fullmatch=True),
    weights=st.dictionaries(kinds, amounts, min_size=1, max_size=6),
    curve=st.builds(HalfLife, spans_ms) | st.builds(Power, spans_ms, st.floats(min_value=0.01, max_value=100.0)),
    affinity=st.builds(
        AffinityRule,
        amounts,
        amounts,
        amounts,
        st.floats(min_value=0.1, max_value=1e9),
        spans_ms,
        st.dictionaries(kinds, st.floats(min_value=-1e9, max_value=1e9), max_size=4),
    ),
    temperature=st.floats(min_value=0.0, max_value=20.0),
    author_gap=st.integers(0, 50),
    seen_factor=st.floats(min_value=0.0, max_value=1.0),
)


@given(policies)
def test_a_policy_written_is_read_as_itself(policy: Policy) -> None:
    """Writing and reading loses nothing, not the last digit of a number."""
    assert parse_policy(to_toml(policy)) == policy


@given(policies)
def test_settings_are_plain_data(policy: Policy) -> None:
    """The exported settings are what the written file holds, and pass through JSON unchanged."""
    settings = policy.as_settings()
    assert json.loads(json.dumps(settings)) == settings == tomllib.loads(to_toml(policy))


@pytest.mark.parametrize(
    ("text", "expected_ms"),
    [
        ("1s", 1e3),
        ("90m", 5.4e6),
        ("12h", 4.32e7),
        ("1.5d", 1.296e8),
        ("0.001s", 1.0),
        ("1.1d", 95_040_000.0),
        ("036h", 1.296e8),
    ],
)
def test_durations_are_numbers_with_a_unit(text: str, expected_ms: float) -> None:
    """Seconds, minutes, hours and days, with decimals, rounded once."""
    assert parse_ms(text) == expected_ms


@pytest.mark.parametrize(
    "text", ["", "h", "12", "0d", "0.0001s", "1e3s", ".5h", "5.h", "+1h", "1h\n", "1ms", "1H", "٣h", "9" * 13 + "d"]
)
def test_other_texts_are_no_durations(text: str) -> None:
    """Without number or unit, 0, shorter than a millisecond, or in another spelling: refused with what is allowed."""
    with pytest.raises(ValueError, match=r"units s, m, h or d, like 12h or 1\.5d"):
        parse_ms(text)


@given(st.floats(min_value=1.0, max_value=1e14))
def test_durations_written_are_read_as_themselves(duration_ms: float) -> None:
    """No duration changes by being written."""
    assert parse_ms(format_ms(duration_ms)) == duration_ms
