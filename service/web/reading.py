"""Reads a request's body without taking more than is allowed."""

from fastapi import Request

from service.errors import BodyTooLarge, Fault, MalformedBody, UnsupportedMedia


async def read_body(request: Request, limit_bytes: int) -> bytes:
    """Read a body up to a limit, whether its length was announced or not.

    Args:
        request: the request.
        limit_bytes: the most that is taken.

    Raises:
        BodyTooLarge: more was announced, or came.
        UnsupportedMedia: the body is compressed.
        MalformedBody: the announced length is no number.

    """
    _refuse_coding(request)
    _refuse_length(request, limit_bytes)
    chunks: list[bytes] = []
    size = 0
    async for chunk in request.stream():
        size += len(chunk)
        if size > limit_bytes:
            raise BodyTooLarge(limit_bytes)
        chunks.append(chunk)
    return chunks[0] if len(chunks) == 1 else b"".join(chunks)


def _refuse_coding(request: Request) -> None:
    coding = request.headers.get("content-encoding", "identity")
    if coding.strip().lower() != "identity":
        raise UnsupportedMedia("Content-Encoding", coding, "identity, which is a body that is not compressed")


def _refuse_length(request: Request, limit_bytes: int) -> None:
    announced = request.headers.get("content-length")
    if announced is None:
        return
    if not (announced.isascii() and announced.isdigit()):
        fault = Fault("Content-Length", announced, "a number of bytes")
        raise MalformedBody(fault.sentence(), [fault])
    if len(announced.lstrip("0")) > len(str(limit_bytes)) or int(announced) > limit_bytes:
        raise BodyTooLarge(limit_bytes, size=None)
