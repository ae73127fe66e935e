"""Parameters of calls: their types, their limits and how each is refused."""

from collections.abc import Collection
from typing import Annotated, Any, Final, Literal

from fastapi import Path, Request
from fastapi.exceptions import RequestValidationError
from pydantic import BaseModel, BeforeValidator, Field, TypeAdapter, ValidationError, WithJsonSchema

from service import times
from service.errors import InvalidField
from service.events.fields import NO_CONTROLS, TIME_SCHEMA, TOPICS_MAX, Form, Id, Topic, not_allowed

AHEAD_MS: Final = 30 * 24 * 60 * 60 * 1000
SKEW_MS: Final = 60 * 1000
K_MAX: Final = 200
BUDGET_MAX_MS: Final = 10_000
CURSOR_CHARS: Final = 1024
EXPOSURES_MAX: Final = 1000


def _digits(value: Any) -> Any:  # noqa: ANN401  a validator sees whatever was sent
    if isinstance(value, str) and not (value.isascii() and value.isdigit() and len(value) < 10):  # noqa: PLR2004
        raise not_allowed("a whole number in digits")
    return value


def _time(value: Any) -> int:  # noqa: ANN401  a validator sees whatever was sent
    try:
        return times.parse_time_text(str(value))
    except times.TimeError as error:
        hint = "; in a query, + is written %2B" if " " in str(value) else ""
        raise not_allowed(times.ALLOWED + hint) from error


PathId = Annotated[Id, Path(description="1 to 128 bytes of UTF-8, percent-encoded; a slash is written %2F")]
Whole = BeforeValidator(_digits)
AsOf = Annotated[int | None, BeforeValidator(_time), WithJsonSchema(TIME_SCHEMA)]
Budget = Annotated[float, Field(ge=1, le=BUDGET_MAX_MS, allow_inf_nan=False)]
Cursor = Annotated[str, Field(min_length=1, max_length=CURSOR_CHARS, pattern=NO_CONTROLS)]


def _names(value: Any) -> Any:  # noqa: ANN401  as above
    return tuple(value.split(",")) if isinstance(value, str) else value


_LISTED: Final = WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 1024})
FormList = Annotated[tuple[Form, ...], BeforeValidator(_names), Field(max_length=TOPICS_MAX), _LISTED]
TopicList = Annotated[tuple[Topic, ...], BeforeValidator(_names), Field(max_length=TOPICS_MAX), _LISTED]


class ExplainQuery(BaseModel):
    """The parameters of an explanation."""

    policy: Id | None = Field(None, description="name of a loaded policy; the reader's assigned one if left out")
    as_of: AsOf = Field(None, description="rank as at this time, from now to 30 days ahead")


class ExposuresQuery(BaseModel):
    """The parameters of what was shown."""

    after: Annotated[str, Field(pattern=r"^[0-9]{1,15}-[0-9]{1,15}$")] = Field(
        "0-0", description="`id` of the last entry that was read"
    )
    count: Annotated[int, Whole] = Field(100, ge=1, le=EXPOSURES_MAX, description="how many entries")


class PopularQuery(ExplainQuery):
    """The parameters of what is popular."""

    k: Annotated[int, Whole] = Field(20, ge=1, le=K_MAX, description="how many posts")
    reader: Id | None = Field(None, description="whose blocks and mutes hold, and whose own posts are left out")
    form: FormList = Field((), description="only posts of these forms, with commas between")
    topics: TopicList = Field((), description="only posts with one of these topics, with commas between")


class FeedQuery(ExplainQuery):
    """The parameters of a feed read."""

    k: Annotated[int, Whole] = Field(20, ge=1, le=K_MAX, description="how many posts")
    budget_ms: Budget | None = Field(
        None, description="time the ranking may take on the server, milliseconds; the setting if left out"
    )
    order: Literal["ranked", "newest"] = Field("ranked", description="newest uses no profile of the reader")
    cursor: Cursor | None = Field(None, description="`next` of the page before")
    explore: Annotated[int, Whole] = Field(1, ge=0, le=1, description="0 switches the randomness off")
    form: FormList = Field((), description="only posts of these forms, with commas between")
    topics: TopicList = Field((), description="only posts with one of these topics, with commas between")
    why: Annotated[int, Whole] = Field(0, ge=0, le=1, description="1 adds the strongest edge of each post")


_PATH_ID: Final[TypeAdapter[str]] = TypeAdapter(Id)


def path_id(request: Request, name: str) -> str:
    """Read an id from the path, as the framework would.

    Raises:
        RequestValidationError: it is no id.

    """
    value = request.path_params[name]
    try:
        return _PATH_ID.validate_python(value)
    except ValidationError as error:
        raise RequestValidationError([{**one, "loc": ("path", name, *one["loc"])} for one in error.errors()]) from error


def feed_query(request: Request) -> FeedQuery:
    """Read the parameters of a feed read, as the framework would, in a fifth of its time.

    Raises:
        InvalidField: a parameter is unknown, or given twice.
        RequestValidationError: a parameter is not valid.

    """
    query = request.query_params
    known_only(request, FeedQuery.model_fields)
    try:
        return FeedQuery.model_validate(dict(query))
    except ValidationError as error:
        raise RequestValidationError([{**one, "loc": ("query", *one["loc"])} for one in error.errors()]) from error


def known_only(request: Request, names: Collection[str] = ()) -> None:
    """Refuse a query that holds an unknown parameter, or one parameter twice.

    Raises:
        InvalidField: naming the parameter and those that are known.

    """
    query = request.query_params
    known = ", ".join(names) or "none"
    for name, value in query.multi_items():
        if name not in names:
            raise InvalidField(name, value, f"only these parameters: {known}")
        if len(query.getlist(name)) > 1:
            raise InvalidField(name, ", ".join(query.getlist(name)), "given once")


def as_of_within(as_of_ms: int | None, now_ms: int) -> int | None:
    """Check that a time to rank at lies from now to 30 days ahead; a clock a minute behind counts as now.

    Args:
        as_of_ms: what was asked for, Unix milliseconds.
        now_ms: now, Unix milliseconds.

    Returns:
        The time, not before now; None where none was asked for.

    Raises:
        InvalidField: it lies outside.

    >>> as_of_within(999_970_000, now_ms=1_000_000_000)
    1000000000

    """
    if as_of_ms is None:
        return None
    if not now_ms - SKEW_MS <= as_of_ms <= now_ms + AHEAD_MS:
        span = f"from now, {times.format_ms(now_ms)}, to 30 days ahead"
        raise InvalidField("as_of", times.format_ms(as_of_ms), span)
    return max(as_of_ms, now_ms)
