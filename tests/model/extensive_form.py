"""Any value graph written out as one program, at given gates: the definition, taken literally.

Used by tests only: every path is expanded, no cuts, solved by an independent library (SciPy).
"""

from __future__ import annotations

import numpy as np
import scipy.optimize
import scipy.sparse

from xlplan.model.value_graph import ValueGraph


class ExtensiveForm:
    """Builds and solves the whole graph; ``gates``: values (0 or 1) of the gating capacities."""

    def __init__(self, graph: ValueGraph, gates: dict[int, float]) -> None:
        self.graph, self.gates = graph, gates
        stage = graph.first_stage
        self.cost = list(stage.cost)
        self.low, self.high = list(stage.col_lower), list(stage.col_upper)
        self.integer = list(stage.is_integer.astype(int))
        self.rows: list[list[tuple[int, float]]] = []
        self.row_low: list[float] = []
        self.row_high: list[float] = []
        self.offset = 0.0
        self._copy_rows(
            stage, np.arange(stage.n_col), stage.value, stage.row_lower, stage.row_upper
        )
        self.n_node = 0
        for root in graph.roots:
            links = []
            for row, offset in zip(root.capacity_matrix, root.capacity_offset, strict=True):
                links.append(([(int(j), row[j]) for j in np.flatnonzero(row)], offset))
            state = []
            for row, offset in zip(root.state_matrix, root.state_offset, strict=True):
                terms: list[tuple[int, float]] = []
                total = offset
                for i in np.flatnonzero(row):
                    terms += [(j, a * row[i]) for j, a in links[i][0]]
                    total += row[i] * links[i][1]
                state.append((terms, total))
            self._expand(root.family, root.member, state, links, root.weight)

    def _copy_rows(self, program, columns, value, low, high) -> None:
        for r in range(program.n_row):
            part = slice(program.start[r], program.start[r + 1])
            terms = zip(program.index[part], value[part], strict=True)
            self.rows.append([(int(columns[j]), a) for j, a in terms])
            self.row_low.append(low[r])
            self.row_high.append(high[r])

    def _link(self, column: int, terms: list[tuple[int, float]], offset: float) -> None:
        self.rows.append([(column, 1.0)] + [(j, -a) for j, a in terms])
        self.row_low.append(offset)
        self.row_high.append(offset)

    def _expand(self, family_at, member_at, state, links, weight) -> None:
        self.n_node += 1
        family = self.graph.families[family_at]
        member = family.member(member_at)
        program = family.program
        base = len(self.cost)
        columns = np.arange(program.n_col) + base
        scale = weight / member.scale
        self.cost += list(member.cost * scale)
        self.offset += member.offset * scale
        self.low += list(member.col_lower)
        self.high += list(member.col_upper)
        self.integer += [0] * program.n_col
        value = program.value.copy()
        value[family.patch] = member.patch_value
        self._copy_rows(program, columns, value, member.row_lower, member.row_upper)
        for position, column in enumerate(family.capacity_columns):
            if column >= 0:
                self._link(int(column) + base, *links[position])
        for position, column in enumerate(member.in_columns):
            if column >= 0:
                self._link(int(column) + base, *state[position])
        for e, exit_weight in enumerate(member.exit_weight):
            if exit_weight <= 0.0:
                continue
            gate = sum(self.gates[c] for c in family.exit_gate[e])
            child = member.exit_child_if_gated[e] if gate > 0.5 else member.exit_child[e]
            out = [([(int(c) + base, 1.0)], 0.0) for c in family.out_columns[e]]
            self._expand(int(child[0]), int(child[1]), out, links, exit_weight * scale)

    def solve(self, fixed_x: dict[int, float] | None = None):
        """(objective, x)."""
        for j, v in (fixed_x or {}).items():
            self.low[j] = self.high[j] = v
        count = [len(r) for r in self.rows]
        matrix = scipy.sparse.csr_matrix(
            (
                [a for r in self.rows for _, a in r],
                [j for r in self.rows for j, _ in r],
                np.concatenate([[0], np.cumsum(count)]),
            ),
            shape=(len(self.rows), len(self.cost)),
        )
        result = scipy.optimize.milp(
            np.array(self.cost),
            integrality=np.array(self.integer),
            bounds=scipy.optimize.Bounds(np.array(self.low), np.array(self.high)),
            constraints=scipy.optimize.LinearConstraint(matrix, self.row_low, self.row_high),
            options={"mip_rel_gap": 1e-9},
        )
        assert result.status == 0, result.message
        n = self.graph.first_stage.n_col
        return float(result.fun) + self.offset, result.x[:n]
