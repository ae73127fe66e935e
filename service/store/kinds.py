"""Codes of kinds: rows and sums hold a small number for each kind, the store holds which."""

from collections.abc import Iterable

from service.store.calls import register_kinds
from service.store.connection import Connection
from service.store.keys import KINDS

CREATION = 1 << 14
"""Flag on the code of a creation edge."""

RETRACTED = 1 << 15
"""Flag on the code of an edge that was taken back."""

CODE_MASK = CREATION - 1
MARKER = CODE_MASK
"""The code of the entry that an erasure leaves in a row."""

MAX_KINDS = 4096


class KindRegistry:
    """The kinds of a store, cached; a code never changes its kind.

    Args:
        connection: to the store.

    """

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self.names: list[str] = []
        self._codes: dict[str, int] = {}

    def code(self, kind: str) -> int | None:
        """Give the code of a kind, None where it has none yet as far as is known here."""
        return self._codes.get(kind)

    async def refresh(self) -> None:
        """Read the registry again.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        stored = await self._connection.read_hash(KINDS)
        names = [""] * len(stored)
        for name, code in stored.items():
            names[int(code)] = name.decode()
        self.names, self._codes = names, {name: code for code, name in enumerate(names)}

    async def register(self, kinds: Iterable[str]) -> set[str]:
        """See that kinds have codes.

        Returns:
            Those that got none, because the store has 4,096 kinds already.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        missing = sorted(kind for kind in set(kinds) if kind not in self._codes)
        if not missing:
            return set()
        await self._connection.run([register_kinds(missing, MAX_KINDS)])
        await self.refresh()
        return {kind for kind in missing if kind not in self._codes}
