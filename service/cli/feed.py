"""`waxwane feed`: a reader's feed, or why a post has its score, straight from the store."""

from typing import Annotated, Final, Literal

import typer
from pydantic import TypeAdapter, ValidationError
from rich.console import Console

from service.cli.feed_tables import explanation_table, feed_table
from service.cli.opening import STORE_SETTINGS, opened
from service.cli.options import Json, with_settings
from service.cli.output import print_json
from service.errors import InvalidField, NotFound
from service.events.fields import ID_BYTES, Id
from service.feed.answers import explanation_document, page_document
from service.feed.types import ExplainRequest, FeedRequest
from service.settings import Settings
from service.times import ALLOWED, TimeError, parse_time_text
from service.web import clock

NOT_FOUND: Final = 1
K_MAX: Final = 200
_ID: Final[TypeAdapter[str]] = TypeAdapter(Id)

Reader = Annotated[str, typer.Argument(metavar="READER", help="The reader's id.")]
K = Annotated[int, typer.Option("--k", min=1, max=K_MAX, help="How many posts.")]
Order = Annotated[Literal["ranked", "newest"], typer.Option(help="By score, or newest first without a profile.")]
PolicyName = Annotated[str | None, typer.Option(help="Name of a loaded policy. Default: that of the reader.")]
AsOf = Annotated[str | None, typer.Option(metavar="TIME", help="Rank as at this time (RFC 3339), up to 30 days ahead.")]
# More than the service's: a process that has just started has its caches to fill.
Budget = Annotated[float, typer.Option(min=1, max=60_000, help="Time that the ranking may take, milliseconds.")]
Explore = Annotated[bool, typer.Option(help="Use the policy's randomness.")]
Why = Annotated[str | None, typer.Option(metavar="POST", help="Explain this post's score in place of the feed.")]


def register(app: typer.Typer) -> None:
    """Add the command."""
    app.command("feed")(with_settings(feed, STORE_SETTINGS))


def feed(
    overrides: dict[str, str | None],
    *,
    reader: Reader,
    k: K = 20,
    order: Order = "ranked",
    policy: PolicyName = None,
    as_of: AsOf = None,
    budget_ms: Budget = 1_000,
    explore: Explore = True,
    why: Why = None,
    json: Json = False,
) -> None:
    """Show a reader's feed, or with --why the parts of one post's score.

    Exit status 1 where the reader may not see the post of --why.
    """
    settings = Settings.load(overrides)
    _check_id("READER", reader)
    now_ms = clock.now_ms()
    as_of_ms = _as_of_ms(as_of, now_ms)
    if why is not None:
        _check_id("--why", why)
        _explain(settings, ExplainRequest(reader, why, policy, as_of_ms), now_ms, as_json=json)
        return
    request = FeedRequest(reader, k, budget_ms, order, policy=policy, as_of_ms=as_of_ms, explore=explore)
    with opened(settings, background=False) as store:
        answer = store.run(store.engine.feed(request, now_ms))
    if json:
        print_json(page_document(answer))
    else:
        Console().print(feed_table(answer))


def _explain(settings: Settings, request: ExplainRequest, now_ms: int, *, as_json: bool) -> None:
    try:
        with opened(settings, background=False) as store:
            explanation = store.run(store.engine.explain(request, now_ms))
    except NotFound:
        typer.echo(f"waxwane: {request.reader} may not see {request.post}, or there is no such post", err=True)
        raise typer.Exit(NOT_FOUND) from None
    if as_json:
        print_json(explanation_document(explanation))
    else:
        Console().print(explanation_table(explanation))


def _check_id(field: str, value: str) -> None:
    try:
        _ID.validate_python(value)
    except ValidationError:
        allowed = f"1 to {ID_BYTES} bytes of UTF-8 without control characters"
        raise InvalidField(field, value, allowed) from None


def _as_of_ms(text: str | None, now_ms: int) -> int | None:
    if text is None:
        return None
    from service.web.parameters import as_of_within  # noqa: PLC0415  it loads the web framework

    try:
        return as_of_within(parse_time_text(text), now_ms)
    except TimeError:
        raise InvalidField("--as-of", text, ALLOWED) from None
