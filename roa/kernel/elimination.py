"""Solving M u = b inside a lane, written out: Gauss elimination with pairwise pivoting, selects in place of branches.

Each row is eliminated by the one above it or, where its leading entry is larger, takes that one's place, so that no
multiplier exceeds one (D. C. Sorensen, Analysis of pairwise pivoting in Gaussian elimination, IEEE Trans. Comput.
C-34 (1985) 274-278, from memory). A matrix that is singular gives NaN, and a step with NaN is rejected and shrinks.
Entries that are zero by the structure of the loop cost nothing.
"""

from __future__ import annotations

Matrix = list[list[str | None]]


class Elimination:
    """The text of a factorisation, and of every solution by it.

    Attributes
    ----------
    lines : assignments that factorise, from the variables of the matrix; they name the factors
    """

    def __init__(self, matrix: Matrix) -> None:
        n = len(matrix)
        self.lines: list[str] = []
        self._pairs: list[tuple[int, int]] = []
        rows: Matrix = [list(row) for row in matrix]
        for k in range(n):
            for i in range(k + 1, n):
                if rows[i][k] is not None:
                    self._eliminate(rows, k, i)
            self.lines.append(f"pivot{k} = 1.0 / {rows[k][k]}")
        self._upper = rows

    def _eliminate(self, rows: Matrix, k: int, i: int) -> None:
        self._pairs.append((k, i))
        swap, factor = f"swap{k}_{i}", f"factor{k}_{i}"
        self.lines.append(f"{swap} = abs({rows[i][k]}) > abs({rows[k][k]})")
        for j in range(k, len(rows)):
            above, below = rows[k][j] or "0.0", rows[i][j] or "0.0"
            if above == below == "0.0":
                continue
            rows[k][j], rows[i][j] = f"m{k}_{i}_{k}_{j}", f"m{k}_{i}_{i}_{j}"
            self.lines.append(f"{rows[k][j]} = {below} if {swap} else {above}")
            self.lines.append(f"lower = {above} if {swap} else {below}")
            if j == k:
                self.lines.append(f"{factor} = lower / {rows[k][k]}")
            else:
                self.lines.append(f"{rows[i][j]} = lower - {factor} * {rows[k][j]}")
        rows[i][k] = None

    def solution(self, b: list[str]) -> list[str]:
        """Return the assignments that replace the variables b by the solution."""
        lines = []
        for k, i in self._pairs:
            swap = f"swap{k}_{i}"
            lines += [
                f"upper = {b[i]} if {swap} else {b[k]}",
                f"lower = {b[k]} if {swap} else {b[i]}",
                f"{b[k]} = upper",
                f"{b[i]} = lower - factor{k}_{i} * upper",
            ]
        for k in reversed(range(len(b))):
            terms = "".join(
                f" - {entry} * {b[j]}" for j, entry in enumerate(self._upper[k]) if j > k and entry is not None
            )
            lines.append(f"{b[k]} = ({b[k]}{terms}) * pivot{k}")
        return lines
