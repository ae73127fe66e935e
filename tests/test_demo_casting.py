"""Who plays each part of the demo's story."""

from service.demo import casting
from service.demo.chronicle import Chronicle, Post
from service.demo.community import Community
from tests.demo_samples import feed, item


def chronicle_of(**audiences: str) -> Chronicle:
    """A chronicle whose posts have these audiences; underscores stand for dashes."""
    posts = {
        name.replace("_", "-"): Post(name.replace("_", "-"), name[0], "photo", "kale", audience, 0, False)  # type: ignore[arg-type]
        for name, audience in audiences.items()
    }
    return Chronicle(Community([]), posts, [])


def test_old_post_is_the_oldest_that_a_comment_lifts_high() -> None:
    """Of the posts out of sight, the oldest that 4 points bring into the upper half of the sight is chosen."""
    stands = feed(
        *(item(f"t-{n}", 9.0 - n) for n in range(4)),
        item("a-1", 4.0, 21),
        item("b-1", 3.9, 30),
        item("c-1", 0.5, 90),
        item("d-1", 3.95, 99),
        item("e-1", 3.99, 5),
    )
    everyone = chronicle_of(a_1="everyone", b_1="everyone", c_1="everyone", d_1="friends", e_1="everyone")
    # With 3.9 + 4 = 7.9 points the place is 3; with k = 4 the upper half ends at 2, so the best score counts.
    assert casting.old_post(stands, everyone, 4) == item("a-1", 4.0, 21)
    higher = feed(*(item(f"t-{n}", 7.5 - n) for n in range(4)), *stands.items[4:])
    assert casting.old_post(higher, everyone, 4) == item("b-1", 3.9, 30)
    assert casting.old_post(feed(*stands.items[:4]), everyone, 4) is None


def test_helper_is_the_friend_with_no_post_near_the_top() -> None:
    """The friend whose best post stands lowest is chosen; followed people and those left out are not."""
    stands = feed(item("a-1", 9), item("b-1", 8), item("a-2", 7))
    relations = {"a": "friend", "b": "friend", "c": "follow"}
    assert casting.helper(relations, stands, ()) == "b"  # type: ignore[arg-type]
    assert casting.helper(relations, stands, ("b",)) == "a"  # type: ignore[arg-type]
    assert casting.helper({"c": "follow"}, stands, ()) is None


def test_likeable_authors_are_followed_and_have_three_posts_not_yet_touched() -> None:
    """An author counts who is followed and has three posts in the feed that the reader has not reacted to."""
    stands = feed(*(item(f"{author}-{n}", 9 - n) for n in range(4) for author in "abcd"))
    relations = {"a": "follow", "b": "friend", "c": "follow", "d": "follow"}
    found = casting.likeable(stands, relations, {"a-0", "c-0", "c-1"}, ("d",))  # type: ignore[arg-type]
    assert found == {"a": ("a-1", "a-2", "a-3")}


def test_fancy_climbs_furthest_within_sight() -> None:
    """The author and form are chosen whose new post climbs furthest and ends in sight."""
    stands = feed(*(item(f"t-{n}", 8.0 - n) for n in range(8)))
    candidates = {"a": ("a-1", "a-2", "a-3"), "b": ("b-1", "b-2", "b-3")}
    # a's video goes from 6.0 (place 3) to 10.8 (1), b's from 0.6 (9) to 5.4 (4): five places.
    assert casting.fancy(stands, candidates, {"a": 1.0, "b": 0.1}, 4) == casting.Fancy("b", "video", candidates["b"])
    # With three in sight b's would not be seen to arrive.
    assert casting.fancy(stands, candidates, {"a": 1.0, "b": 0.1}, 3).author == "a"


def test_loudest_has_most_posts_in_sight() -> None:
    """The author with most posts in sight is chosen, the better placed of two; posts out of sight do not count."""
    stands = feed(item("a-1", 9), item("b-1", 8), item("b-2", 7), item("a-2", 6), item("a-3", 5))
    assert casting.loudest(stands, 3, ()) == "b"
    assert casting.loudest(stands, 4, ()) == "a"
    assert casting.loudest(stands, 1, ("a",)) is None


def test_best_leaves_out_who_has_another_part() -> None:
    """The best post by somebody who is not left out is chosen."""
    stands = feed(item("a-1", 9), item("b-1", 8))
    assert casting.best(stands, ("a",)) == item("b-1", 8)
    assert casting.best(stands, ("a", "b")) is None
