"""Feeds and explanations as the documents that callers get, over HTTP and on the command line."""

from typing import Any

from service.feed.types import CrowdPart, Explanation, FeedAnswer, FeedItem, TiePart
from service.times import format_ms


def page_document(answer: FeedAnswer) -> dict[str, Any]:
    """Write a page of a feed."""
    return {
        "reader": answer.reader,
        "as_of": format_ms(answer.as_of_ms),
        "policy": answer.policy,
        "complete": answer.complete,
        "items": [_item(item) for item in answer.items],
        "next": answer.next,
    }


def explanation_document(explanation: Explanation) -> dict[str, Any]:
    """Write why a post has its score."""
    return {
        "reader": explanation.reader,
        "post": explanation.post,
        "as_of": format_ms(explanation.as_of_ms),
        "policy": explanation.policy,
        "score": explanation.score,
        "factors": [{"name": factor.name, "value": factor.value} for factor in explanation.factors],
        "parts": [*map(_tie_part, explanation.ties), _crowd_part(explanation.crowd)],
    }


def _item(item: FeedItem) -> dict[str, Any]:
    return {
        "post": item.post,
        "author": item.author,
        "form": item.form,
        "posted_at": format_ms(item.posted_ms),
        "score": item.score,
    }


def _tie_part(part: TiePart) -> dict[str, Any]:
    return {
        "source": "tie",
        "actor": part.actor,
        "kind": part.kind,
        "at": format_ms(part.at_ms),
        "affinity": part.affinity,
        "weight": part.weight,
        "freshness": part.freshness,
        "product": part.product,
    }


def _crowd_part(part: CrowdPart) -> dict[str, Any]:
    return {"source": "crowd", "affinity": part.affinity, "sum": part.sum, "product": part.product}
