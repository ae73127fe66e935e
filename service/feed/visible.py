"""Who may see a post."""

from scoring.affinity import BLOCK, FOLLOW, FRIEND, MUTE, NONE
from service.feed.readers import ReaderState, hash_number
from service.store.records import PostRecord


class Gate:
    """Says which posts one reader may see.

    Args:
        reader: the reader's own state.

    """

    def __init__(self, reader: ReaderState) -> None:
        self._reader = hash_number(reader.hash)
        self._relation = dict(zip(reader.tie_person.tolist(), reader.tie_relation.tolist(), strict=True))
        self._blocked_by = reader.blocked_by
        self._friend_of = reader.friend_of

    def lets_through(self, record: PostRecord | None) -> bool:
        """Say whether the reader may see a post; one that has not come yet, nobody may see."""
        if record is None or not record.recorded or record.withdrawn:
            return False
        author = hash_number(record.author_hash)
        relation = self._relation.get(author, NONE)
        if author == self._reader or relation in (MUTE, BLOCK) or author in self._blocked_by:
            return False
        match record.audience:
            case "everyone":
                return True
            case "followers":
                return relation in (FOLLOW, FRIEND)
            case "friends":
                return author in self._friend_of
            case _:
                return False
