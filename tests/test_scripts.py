"""Scripts keep what their headers say: their stubs, their shared pieces, their keys, on every server at hand."""

import ast
import inspect
import re
import struct
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
import redis

from service.embedded import EmbeddedServer
from service.server_binary import candidates
from service.store import bulk_calls, calls, keys, scripts
from service.store.bulk_calls import PeopleRuns, PostRuns
from service.store.calls import Call, Creation, EdgeWork, Effect, NewEdge, NewEvent, StoreLimits
from service.store.pieces import INTERACTION, pack
from tests.lua import globals_of, read_header

FOLDER = Path(inspect.getfile(scripts)).parent / "scripts"
NAMES = scripts.names()
PIECES = sorted(path.stem for path in (FOLDER / "lib").glob("*.lua"))
NOW_MS = 1_777_885_200_000
LIMITS = StoreLimits(86_400_000, 86_400_000, struct.pack("<2d", 3.6e6, 8.64e7), 2)
ALLOWED_GLOBALS = {
    *("redis", "struct", "KEYS", "ARGV"),
    *("string", "table", "math", "tonumber", "ipairs", "unpack"),
}

A, B, C = (bytes([number]) * 8 for number in (1, 2, 3))
EFFECT = Effect(5, "e", 9, 8)
EVENT = NewEvent(A, "mina", B, NOW_MS, b"piece")
EDGE = NewEdge(A, B * 2, b"piece")
PLUS = b"+" + B + A
WRITE = calls.PostWrite(A, "bed", B, "mina", NOW_MS, "e1", 0, "note", "beans", 1)
TIE = calls.TieWrite(A, B, "joel", NOW_MS, 1, "e2")

SIZES = struct.pack("<4I", 1, 29, 2, 58)
PEOPLE = PeopleRuns([A, B], A + B + C, (A + B) * 3, C * 3, pack(INTERACTION, B * 3) * 3, SIZES, ["mina", "joel"])
POSTS = PostRuns([A, B], B * 2, b"", C * 2, struct.pack("<6I", 1, 0, 1, 1, 0, 1), ["bed", "plot"])

SAMPLES: dict[str, tuple[Callable[[], Call], tuple[int, ...], tuple[int, ...]]] = {
    "add_edges": (
        lambda: calls.add_edges(
            1,
            NOW_MS,
            LIMITS,
            [EdgeWork(EFFECT, [(A, "bed", PLUS * 2), (B, "", PLUS)]), EdgeWork(EFFECT, [(C, "", PLUS)])],
        ),
        (3,),
        (2, 3),
    ),
    "bulk_add_edges": (lambda: bulk_calls.bulk_add_edges(1, "5e,9,8", NOW_MS, LIMITS, POSTS), (2,), (2,)),
    "bulk_raise_board": (lambda: bulk_calls.bulk_raise_board(2, 9, 0.5, ["1.5", A, "2.5", B]), (), (2,)),
    "bulk_read_authors": (lambda: bulk_calls.bulk_read_authors([A, B]), (2,), ()),
    "bulk_take_interactions": (lambda: bulk_calls.bulk_take_interactions(1, NOW_MS, LIMITS, PEOPLE), (2,), (2,)),
    "drop_relation": (lambda: calls.drop_relation(EFFECT, 1, ("in", "mark"), [A, B, C], A, NOW_MS), (3,), ()),
    "learn_author": (lambda: calls.learn_author(A, B, C), (), ()),
    "log_changes": (lambda: calls.log_changes([A, B], [C]), (), ()),
    "purge_posts": (lambda: calls.purge_posts(EFFECT, 1, [A, B], C, NOW_MS, NOW_MS, LIMITS), (2,), ()),
    "put_creations": (
        lambda: calls.put_creations(1, NOW_MS, LIMITS, [Creation(A, 9, B * 2), Creation(C, 10, B * 2)]),
        (2,),
        (2,),
    ),
    "put_incoming": (lambda: calls.put_incoming(EFFECT, TIE, NOW_MS, marked=True), (), ()),
    "put_outgoing": (lambda: calls.put_outgoing(9, TIE, NOW_MS), (), ()),
    "put_posts": (lambda: calls.put_posts(1, NOW_MS, LIMITS, [(EFFECT, WRITE)] * 2), (2,), (2,)),
    "register_kinds": (lambda: calls.register_kinds(["like", "share", "hide"], 9), (), (3,)),
    "settle_event": (lambda: calls.settle_event(A, 9, B), (), ()),
    "settle_interactions": (
        lambda: calls.settle_interactions(1, 9, [(A, [(B, C), (C, b"")]), (B, [(A, b"-")])]),
        (2,),
        (2, 3),
    ),
    "sweep_person": (lambda: calls.sweep_person(A, B, NOW_MS, 9, NOW_MS, LIMITS), (), ()),
    "take_erase": (lambda: calls.take_erase(EVENT, NOW_MS, LIMITS), (), ()),
    "take_event": (lambda: calls.take_event(EVENT, NOW_MS, LIMITS, tie_target=B), (), ()),
    "take_interactions": (
        lambda: calls.take_interactions(1, NOW_MS, LIMITS, [(A, "mina", [EDGE]), (B, "joel", [EDGE, EDGE, EDGE])]),
        (2,),
        (2, 4),
    ),
    "take_posts": (lambda: calls.take_posts(1, NOW_MS, LIMITS, [(EVENT, C)] * 3), (3,), (3,)),
    "take_retract": (lambda: calls.take_retract(EVENT, NOW_MS, LIMITS, C), (), ()),
    "take_seen": (lambda: calls.take_seen(EVENT, NOW_MS, LIMITS, [A, B, C]), (), (3,)),
    "trim_board": (lambda: calls.trim_board(2, 9), (), ()),
    "withdraw_post": (lambda: calls.withdraw_post(EFFECT, A, "bed", NOW_MS, LIMITS), (), ()),
}
"""For each script a call of its stub, and how often each group of its keys and of its arguments repeats there."""


def text_of(name: str) -> str:
    return (FOLDER / f"{name}.lua").read_text()


@pytest.fixture(scope="module", params=candidates(), ids=lambda path: path.name)
def server(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[redis.Redis]:
    """Every server program at hand in turn."""
    with (
        EmbeddedServer(tmp_path_factory.mktemp("server"), request.param) as running,
        redis.Redis.from_url(running.url) as client,
    ):
        yield client


@pytest.mark.parametrize("name", NAMES)
def test_the_header_is_whole(name: str) -> None:
    """Each script says what it does, its keys, its arguments, what it returns and what it costs."""
    header = read_header(text_of(name))
    assert header.purpose.endswith(".")
    assert header.keys.count(*[1] * len(header.keys.groups)) >= 1
    assert header.args.count(*[1] * len(header.args.groups)) >= 1
    assert len(header.returns) > len("Returns ")
    assert re.search(r"\d", header.costs)


@pytest.mark.parametrize("name", NAMES)
def test_the_stub_hands_over_what_the_header_lists(name: str) -> None:
    """A stub passes as many keys and arguments as the header of its script enumerates."""
    make, key_repeats, arg_repeats = SAMPLES[name]
    header, call = read_header(text_of(name)), make()
    assert call.script == scripts.load(name)
    assert len(call.keys) == header.keys.count(*key_repeats)
    assert len(call.args) == header.args.count(*arg_repeats)


def test_each_script_has_one_typed_stub() -> None:
    """Each script is loaded by exactly one function of the two files of stubs, which has its name and all types."""
    found = []
    bodies = [node for file in (calls, bulk_calls) for node in ast.parse(inspect.getsource(file)).body]
    for function in [node for node in bodies if isinstance(node, ast.FunctionDef)]:
        loaded = [
            node.args[0].value
            for node in ast.walk(function)
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "load"
            if isinstance(node.args[0], ast.Constant)
        ]
        arguments = [*function.args.args, *function.args.kwonlyargs]
        assert all(argument.annotation for argument in arguments)
        assert isinstance(function.returns, ast.Name)
        assert function.returns.id == "Call"
        assert loaded in ([], [function.name])
        found += loaded
    assert sorted(map(str, found)) == NAMES


def test_a_script_is_called_only_through_its_stub() -> None:
    """Outside of the stubs and the connection nobody loads a script."""
    for path in FOLDER.parent.parent.rglob("*.py"):
        if path.name not in {"calls.py", "bulk_calls.py", "connection.py", "scripts.py"}:
            assert "scripts import load" not in path.read_text(), path


@pytest.mark.parametrize("name", NAMES)
def test_shared_pieces_exist_and_are_used(name: str) -> None:
    """The pieces named in a script's `use:` line exist, and each of them defines something that the script calls."""
    text = text_of(name)
    used = read_header(text).pieces
    assert set(used) <= set(PIECES)
    behind = [(FOLDER / "lib" / f"{piece}.lua").read_text() for piece in used]
    for at, piece in enumerate(behind):
        defined = re.findall(r"^local function (\w+)", piece, re.MULTILINE)
        rest = "".join(behind[at + 1 :]) + text
        assert any(re.search(rf"\b{function}\(", rest) for function in defined), used[at]


def test_every_shared_piece_is_used() -> None:
    """No piece lies about unused."""
    assert {piece for name in NAMES for piece in read_header(text_of(name)).pieces} == set(PIECES)


@pytest.mark.parametrize("name", NAMES)
def test_a_script_uses_no_global_of_its_own(name: str) -> None:
    """A compiled script writes no global and reads only those that every server gives a script."""
    read, written = globals_of(scripts.load(name).source)
    assert written == set()
    assert read <= ALLOWED_GLOBALS


@pytest.mark.parametrize("path", sorted(FOLDER.rglob("*.lua")), ids=lambda path: path.stem)
def test_a_script_builds_no_key(path: Path) -> None:
    """Every key handed to a command is one of KEYS, or a name that ends in `key` and only ever stands for one."""
    text = re.sub(r"--.*", "", path.read_text())
    for key in re.findall(r"redis\.call\(\s*'\w+'\s*,\s*([^,)]+)", text):
        assert re.fullmatch(r"KEYS\[[^\]]+\]|(\w+_)?key", key), key
    for names, value in re.findall(r"((?:\w+, )*\b\w*key\b(?:, \w+)*)\s*=\s*([^=\n].*)", text):
        assert "KEYS[" in value, (names, value)
        assert ".." not in value, (names, value)


def test_every_script_loads(server: redis.Redis) -> None:
    """Every server takes every script, under the hash that we reckon for it."""
    for name in NAMES:
        script = scripts.load(name)
        assert server.script_load(script.source) in (script.sha, script.sha.encode())


def test_every_script_runs_on_an_empty_store(server: redis.Redis) -> None:
    """Every server runs every stub's call without an error, where nothing is stored and again afterwards."""
    server.flushall()
    for _ in range(2):
        for make, _, _ in SAMPLES.values():
            call = make()
            assert call.script is not None
            server.eval(call.script.source, len(call.keys), *call.keys, *call.args)


def test_keys_say_their_bucket() -> None:
    """A key's hash tag is the bucket of its hash, so that all a script touches lies together."""
    assert keys.key("row", b"\x82" + bytes(6) + b"\x07") == b"row:{2}:\x82" + bytes(6) + b"\x07"
    assert keys.keys("post", [b"\xff" * 8]) == [b"post:{127}:" + b"\xff" * 8]
