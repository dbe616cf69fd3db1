"""Cuts of a node's value, from the multipliers that its program was left with.

Enter: ``NodeOutcome``s of one family, whichever kept model they come from, and the members whose
cuts are wanted. Leave: cuts of the members solved, of later ones of a nested family, and of others
by sharing. ``cuts.py`` has the arithmetic; here whole runs of outcomes are laid out for it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.solve.cut_pool import CutBatch, CutPool, joined
from xlplan.solve.cuts import ChildMultipliers, DualBound
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node import NodeOutcome

IntArray = NDArray[np.integer]

MOST_PAIRS = 1024
"""So many cuts of other members are made in one pass over arrays."""


class NodeCuts:
    """Makes the cuts of one family.

    Parameters
    ----------
    i_family : int
    bound : DualBound of the family
    cache : MemberCache, the family's members
    pools : CutPool of every family; those of the children are read
    is_fixed : bool, whether the children are the same in all members
    """

    def __init__(
        self,
        i_family: int,
        bound: DualBound,
        cache: MemberCache,
        pools: Sequence[CutPool],
        is_fixed: bool,
    ) -> None:
        self._i_family, self._bound, self._cache = i_family, bound, cache
        self._pools, self._is_fixed = pools, is_fixed

    def cuts_from(
        self, outcomes: Sequence[NodeOutcome], members: Sequence[int], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray]:
        """Cuts of solved members, and of later ones of a nested family.

        Returns
        -------
        the cuts, and the position of each outcome's own among them, (n_outcome,)
        """
        if self._bound.is_nested or self._bound.table is None:
            parts = [
                self._cut_alone(outcome, member, group)
                for outcome, member, group in zip(outcomes, members, groups, strict=True)
            ]
            lengths = [len(part) for part in parts]
            return joined(parts), np.cumsum([0, *lengths[:-1]])
        n = np.arange(len(outcomes))
        exits = [outcome.exits for outcome in outcomes]
        children = ChildMultipliers(
            np.repeat(n, [len(e.exit) for e in exits]),
            *(
                np.concatenate([getattr(e, name) for e in exits])
                for name in ("exit", "pi", "intercept", "state_slope", "capacity_slope")
            ),
        )
        found = self._bound.cuts_of_pairs(
            np.array([o.pi for o in outcomes]), n, np.array(members), children, np.array(groups)
        )
        assert found is not None
        cuts, is_valid = found
        if is_valid.all():
            return cuts, n
        parts = [
            cuts.take(n[i : i + 1])
            if is_valid[i]
            else self._cut_alone(outcomes[i], members[i], groups[i])
            for i in n.tolist()
        ]
        return joined(parts), n

    def cut_from(self, outcome: NodeOutcome, i_member: int, group: int) -> CutBatch:
        """The cut of the solved member, first, and of later ones of a nested family."""
        return self.cuts_from([outcome], [i_member], [group])[0]

    def _cut_alone(self, outcome: NodeOutcome, i_member: int, group: int) -> CutBatch:
        member = self._cache.get(self._i_family, i_member)
        if self._bound.is_nested:
            return self._bound.nested_cuts(member, i_member, outcome.pi, outcome.exits, group)
        return self._bound.cut(member, outcome.pi, outcome.exits, i_member, group)

    def shared_cuts(
        self, outcomes: Sequence[NodeOutcome], shared: Sequence[IntArray], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray] | None:
        """Cuts of other members from the multipliers of solved ones; None where there are none.

        The multipliers of children's cuts go to the same-numbered cuts of the other's children;
        members that have none of that number are left out.

        Parameters
        ----------
        outcomes, groups : solved nodes, and the numbers of their cuts
        shared : per outcome, members (n,) for which its multipliers are tried

        Returns
        -------
        the cuts, and the outcome that each came from, (n_cut,)
        """
        if self._bound.table is None:
            return None
        batches, origins = [], []
        for part in _parts([len(members) for members in shared]):
            found = self._shared_part(outcomes[part], shared[part], groups[part])
            if found is not None:
                batches.append(found[0])
                origins.append(found[1] + part.start)
        return (joined(batches), np.concatenate(origins)) if batches else None

    def _shared_part(
        self, outcomes: Sequence[NodeOutcome], shared: Sequence[IntArray], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray] | None:
        table = self._bound.table
        assert table is not None
        counts = np.array([len(members) for members in shared])
        origin = np.repeat(np.arange(len(outcomes)), counts)
        members = np.concatenate(shared)
        # One entry for each pair of a member and a child's cut of the outcome it shares.
        n_cut = np.array([len(o.exits.exit) for o in outcomes])
        n_entry = n_cut[origin]
        pair = np.repeat(np.arange(len(members)), n_entry)
        first = np.cumsum(n_entry) - n_entry
        at = np.arange(len(pair)) - first[pair] + (np.cumsum(n_cut) - n_cut)[origin[pair]]
        exits = [o.exits for o in outcomes]
        exit_ = np.concatenate([e.exit for e in exits])[at]
        pi = np.concatenate([e.pi for e in exits])[at]
        intercept = np.concatenate([e.intercept for e in exits])[at]
        state_slope = np.concatenate([e.state_slope for e in exits])[at]
        capacity_slope = np.concatenate([e.capacity_slope for e in exits])[at]
        kept = np.ones(len(members), dtype=bool)
        if not self._is_fixed and len(pair):
            number = np.concatenate([o.exit_group for o in outcomes])[at]
            weight, child = table.exits(members)
            weight, child = weight[pair, exit_], child[pair, exit_]
            # Without a child the multiplier is scaled to nothing.
            has_child = (child[:, 1] >= 0) & (weight > 0.0)
            for i_child in np.unique(child[has_child, 0]).tolist():
                pool = self._pools[i_child]
                here = (has_child & (child[:, 0] == i_child)).nonzero()[0]
                position = pool.positions_of(child[here, 1], number[here])
                kept[pair[here[position < 0]]] = False
                intercept[here] = pool.intercept[position]
                state_slope[here] = pool.state_slope[position]
                capacity_slope[here] = pool.capacity_slope[position]
        if not kept.any():
            return None
        new_pair = np.cumsum(kept) - 1
        stays = kept[pair]
        children = ChildMultipliers(
            new_pair[pair[stays]],
            exit_[stays],
            pi[stays],
            intercept[stays],
            state_slope[stays],
            capacity_slope[stays],
        )
        origin, members = origin[kept], members[kept]
        found = self._bound.cuts_of_pairs(
            np.array([o.pi for o in outcomes]), origin, members, children, np.array(groups)[origin]
        )
        assert found is not None
        cuts, is_valid = found
        return (cuts, origin) if is_valid.all() else (cuts.take(is_valid), origin[is_valid])


def _parts(counts: Sequence[int]) -> list[slice]:
    """Consecutive outcomes whose pairs are worked out together: arrays of a bounded size."""
    parts, begin, n = [], 0, 0
    for i, count in enumerate(counts):
        if n and n + count > MOST_PAIRS:
            parts.append(slice(begin, i))
            begin, n = i, 0
        n += count
    if n:
        parts.append(slice(begin, len(counts)))
    return parts
