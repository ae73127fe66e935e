"""Feeds and explanations as the documents that callers get, over HTTP and on the command line."""

from typing import Any

from service.feed.types import CrowdPart, Explanation, FeedAnswer, FeedItem, PopularAnswer, Reason, TiePart
from service.times import format_ms


def page_document(answer: FeedAnswer, *, why: bool = False) -> dict[str, Any]:
    """Write a page of a feed, with the reason for each post where it was asked for."""
    return {
        "reader": answer.reader,
        "as_of": format_ms(answer.as_of_ms),
        "policy": answer.policy,
        "complete": answer.complete,
        "items": [_item(item, why=why) for item in answer.items],
        "next": answer.next,
    }


def popular_document(answer: PopularAnswer) -> dict[str, Any]:
    """Write what is popular."""
    return {
        "as_of": format_ms(answer.as_of_ms),
        "policy": answer.policy,
        "complete": answer.complete,
        "items": [_item(item, why=False) for item in answer.items],
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


def _item(item: FeedItem, *, why: bool) -> dict[str, Any]:
    document: dict[str, Any] = {
        "post": item.post,
        "author": item.author,
        "form": item.form,
        "posted_at": format_ms(item.posted_ms),
        "score": item.score,
    }
    if item.source is not None:
        document["source"] = item.source
    if why:
        document["why"] = None if item.why is None else _reason(item.why)
    return document


def _reason(reason: Reason) -> dict[str, Any]:
    return {
        "actor": reason.actor,
        "relation": reason.relation,
        "kind": reason.kind,
        "at": format_ms(reason.at_ms),
        "age_s": reason.age_ms // 1000,
        "product": reason.product,
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
