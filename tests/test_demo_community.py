"""The demo's people: how many, how they are called, and who knows whom."""

from collections import Counter

import numpy as np
import pytest

from service.demo.community import DAY_MS, NAMES, WEEK_MS, Community, Declaration, settle


def community(size: int = 320, seed: int = 3) -> Community:
    """A community."""
    return settle(size, np.random.default_rng(seed))


def test_same_seed_same_community() -> None:
    """The same seed gives the same people and ties; another one gives others."""
    assert community() == community()
    assert community() != community(seed=4)


@pytest.mark.parametrize("size", [300, 320, 1_000])
def test_people(size: int) -> None:
    """There are as many people as asked for, each with an id of a first name and a plot of their own."""
    people = community(size).people
    assert len({person.id for person in people}) == size
    assert [person.plot for person in people] == list(range(1, size + 1))
    assert all(person.id.split(".plot") == [person.id.partition(".")[0], str(person.plot)] for person in people)
    assert {person.id.partition(".")[0] for person in people} <= set(NAMES)


def test_nobody_has_a_tie_to_themselves_or_is_alone() -> None:
    """Everybody knows at least three others, and nobody is tied to themselves."""
    ties = community().ties()
    assert all(person not in own for person, own in ties.items())
    assert min(len(own) for own in ties.values()) >= 3


def test_friends_are_neighbours() -> None:
    """Friendships are mutual at first, and most friends' plots lie next to each other."""
    made = community()
    plots = {person.id: divmod(person.plot - 1, 16) for person in made.people}
    pairs = {(one.actor, one.target) for one in made.declarations if one.relation == "friend"}
    assert all((target, actor) in pairs for actor, target in pairs)
    gaps = [max(abs(a - b) for a, b in zip(plots[actor], plots[target], strict=True)) for actor, target in pairs]
    assert np.mean(np.array(gaps) <= 2) > 0.75


def test_friendships_are_clustered() -> None:
    """Two friends of a person are friends far more often than two people taken at random."""
    ties = community().ties()
    friends = {person: {other for other, kind in own.items() if kind == "friend"} for person, own in ties.items()}
    pairs = [(a, b) for own in friends.values() for a in own for b in own if a < b]
    density = sum(map(len, friends.values())) / (len(friends) * (len(friends) - 1))
    assert np.mean([b in friends[a] for a, b in pairs]) > 5 * density


def test_followers_are_heavy_tailed() -> None:
    """Few are followed by many: the most followed tenth has more than a third of all followers."""
    followers = Counter(one.target for one in community().declarations if one.relation == "follow")
    counts = sorted(followers.values(), reverse=True)
    assert sum(counts[:32]) > sum(counts) / 3
    assert counts[0] > 8 * np.median(counts)


def test_a_few_fell_out() -> None:
    """There are some mutes and blocks, and they are few."""
    counts = Counter(relation for own in community().ties().values() for relation in own.values())
    assert 10 <= counts["mute"] <= 60
    assert 2 <= counts["block"] <= 25


def test_later_declaration_stands() -> None:
    """Of two declarations between the same people the later one is the tie."""
    people = community(300).people[:2]
    one, other = (person.id for person in people)
    declarations = [Declaration(one, other, "mute", DAY_MS), Declaration(one, other, "follow", WEEK_MS)]
    assert Community(people, declarations).ties() == {one: {other: "mute"}, other: {}}
