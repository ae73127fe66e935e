"""Says how to go on after the demo."""

from pathlib import Path
from urllib.parse import quote

Paragraph = tuple[str, tuple[str, ...]]

_SERVED = "http://127.0.0.1:8321"
_AS_JSON = "-H content-type:application/json"
_NOW = "'$(date -u +%FT%TZ)'"


def paragraphs(url: str, reader: str, post: str, k: int, *, keep: bool, data: Path | None) -> list[Paragraph]:
    """Write what to do next, each with lines to copy.

    Args:
        url: where the demo's service answers.
        reader: whose feed was shown.
        post: one of the feed's posts.
        k: how many posts were shown.
        keep: whether the service stays up.
        data: the folder that stays; None where it goes.

    """
    base = url if keep else _SERVED
    told = [_staying(url, keep=keep, data=data)]
    if keep or data is not None:
        told.append(("Read the feed, ask why, and let something happen:", _calls(base, reader, post, k)))
    else:
        told.append(("Your own service; then, in another terminal, its first events and feed:", _first_calls()))
    return [*told, ("Your own events, and what else there is; README.md tells the rest:", _more(base))]


def _staying(url: str, *, keep: bool, data: Path | None) -> Paragraph:
    where = f"its data in {data}" if data else "its data in a temporary folder that goes with it"
    if keep:
        return f"The service stays at {url} until Ctrl-C, {where}.", ()
    if data:
        return f"The service ends now; its data stays in {data}:", (f"waxwane serve --data {data}",)
    return "This service and its data go now. To keep them for calls of your own:", ("waxwane demo --keep",)


def _calls(base: str, reader: str, post: str, k: int) -> tuple[str, ...]:
    feed = f"{base}/v1/feeds/{quote(reader, safe='')}"
    return (
        f"FEED={feed}",
        f'curl "$FEED?k={k}"',
        f'curl "$FEED/posts/{quote(post, safe="")}"',
        f"curl {base}/v1/events {_AS_JSON} -d '",
        '  {"id": "my-1", "type": "interaction", "kind": "like",',
        f'   "actor": "{reader}",',
        f'   "post": "{post}",',
        f'   "at": "{_NOW}"}}\'',
    )


def _first_calls() -> tuple[str, ...]:
    return (
        "waxwane serve",
        f"curl {_SERVED}/v1/events {_AS_JSON} -d '[",
        '  {"id": "e1", "type": "tie", "actor": "joel", "target": "mina",',
        f'   "relation": "follow", "at": "{_NOW}"}},',
        '  {"id": "e2", "type": "post", "actor": "mina", "post": "p1",',
        f'   "form": "photo", "at": "{_NOW}"}}]\'',
        f"curl {_SERVED}/v1/feeds/joel",
    )


def _more(base: str) -> tuple[str, ...]:
    return (
        "waxwane import events.ndjson",
        f"curl {base}/openapi.json",
        "waxwane --help",
    )
