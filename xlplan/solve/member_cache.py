"""Members of families, kept within a limit of memory."""

from __future__ import annotations

from collections import OrderedDict

from xlplan.model.value_graph import Family, Member

CACHE_BYTES = 80_000_000
"""Memory for members kept in one process; results do not depend on it."""


class MemberCache:
    """Members of all families used last; the graph may work each one out anew."""

    def __init__(self, families: tuple[Family, ...], limit_bytes: int = CACHE_BYTES) -> None:
        self._families = families
        self.limit_bytes = limit_bytes
        self._members: OrderedDict[tuple[int, int], tuple[Member, int]] = OrderedDict()
        self._bytes = 0

    def get(self, family: int, member: int) -> Member:
        """One member."""
        key = (family, member)
        if key in self._members:
            self._members.move_to_end(key)
            return self._members[key][0]
        made = self._families[family].member(member)
        size = 8 * (3 * len(made.cost) + 2 * len(made.row_lower) + 5 * len(made.exit_weight))
        self._members[key] = (made, size)
        self._bytes += size
        while self._bytes > self.limit_bytes and len(self._members) > 1:
            self._bytes -= self._members.popitem(last=False)[1][1]
        return made
