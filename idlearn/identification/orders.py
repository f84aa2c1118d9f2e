"""Order and dead-time search from one triangular factor: its cost does not grow with the record.

All structures of up to n_a_max, n_b_max, n_k_max are nested in one largest regressor. Its
triangular factor is gathered in one pass over the record; every smaller least-squares problem is
then solved on the factor alone, and all n_b of one (n_a, n_k) come from a single
re-triangularisation, because their columns are nested.
"""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from idlearn.errors import InputError
from idlearn.identification.criteria import criteria
from idlearn.identification.regressors import centre_of, triangle
from idlearn.logs import PlantLog

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class Orders:
    """One structure with its criteria.

    Attributes:
        n_a: lags of the outputs.
        n_b: lags of every input.
        n_k: dead time per input [samples].
        loss: mean squared residual (geometric mean over several outputs).
        aicc: corrected Akaike criterion.
        bic: Schwarz criterion.
    """

    n_a: int
    n_b: int
    n_k: tuple[int, ...]
    loss: float
    aicc: float
    bic: float


@dataclass(frozen=True)
class OrderTable:
    """All structures that were tried, on the same rows.

    Attributes:
        tried: every structure.
        rows: rows of the regression.
    """

    tried: tuple[Orders, ...]
    rows: int

    def best(self, criterion: str = "bic") -> Orders:
        """Return the structure with the least "bic" or "aicc"."""
        return min(self.tried, key=lambda o: getattr(o, criterion))

    def to_frame(self) -> "pd.DataFrame":
        """Return one row per structure."""
        import pandas as pd

        return pd.DataFrame([vars(o) for o in self.tried])


def order_search(
    log: PlantLog,
    n_a_max: int = 8,
    n_b_max: int = 8,
    n_k_max: int = 20,
    n_k_min: int = 0,
) -> OrderTable:
    """Try every ARX structure on the same rows.

    Args:
        log: with a segment longer than n_k_max + n_b_max.
        n_a_max: most lags of the outputs.
        n_b_max: most lags of an input; all inputs share n_b.
        n_k_max: longest dead time [samples].
        n_k_min: shortest; 1 in closed loop, where u[k] already depends on y[k].

    Returns:
        every (n_a, n_b, n_k) for one input. With several inputs the dead times are found one
        input after the other, the others held, until none changes.

    Raises:
        TooShortError: no segment is long enough.
        InputError: ranges that are empty.
    """
    if n_a_max < 1 or n_b_max < 1 or not 0 <= n_k_min <= n_k_max:
        raise InputError(
            f"ranges n_a 1..{n_a_max}, n_b 1..{n_b_max}, n_k {n_k_min}..{n_k_max} are empty; "
            "widen them"
        )
    n_in, n_y = log.inputs.shape[1], log.n_y
    depth = n_k_max + n_b_max
    R, rows = triangle(log, centre_of(log), n_a_max, [0] * n_in, [depth - 1] * n_in)
    search = _Search(R, rows, n_a_max, n_b_max, depth, n_in, n_y)
    if n_in == 1:
        for n_k in range(n_k_min, n_k_max + 1):
            search.run((n_k,))
    else:
        dead = [max(n_k_min, 1)] * n_in
        for _ in range(3):
            before = list(dead)
            for j in range(n_in):
                for n_k in range(n_k_min, n_k_max + 1):
                    search.run(tuple([*dead[:j], n_k, *dead[j + 1 :]]))
                of_j = [
                    o
                    for o in search.tried.values()
                    if [v for i, v in enumerate(o.n_k) if i != j]
                    == [v for i, v in enumerate(dead) if i != j]
                ]
                dead[j] = min(of_j, key=lambda o: o.bic).n_k[j]
            if dead == before:
                break
    return OrderTable(tuple(search.tried.values()), rows)


class _Search:
    def __init__(
        self, R: np.ndarray, rows: int, n_a_max: int, n_b_max: int, depth: int, n_in: int, n_y: int
    ) -> None:
        self.R, self.rows, self.n_a_max, self.n_b_max = R, rows, n_a_max, n_b_max
        self.depth, self.n_in, self.n_y = depth, n_in, n_y
        self.tried: dict[tuple[int, int, tuple[int, ...]], Orders] = {}

    def run(self, n_k: tuple[int, ...]) -> None:
        """Score all n_a and n_b of one set of dead times."""
        first_u = self.n_a_max * self.n_y
        u_columns = [
            first_u + j * self.depth + n_k[j] + i
            for i in range(self.n_b_max)
            for j in range(self.n_in)
        ]
        targets = list(range(self.R.shape[1] - self.n_y, self.R.shape[1]))
        for n_a in range(1, self.n_a_max + 1):
            if (n_a, 1, n_k) in self.tried:
                continue
            columns = [*range(n_a * self.n_y), *u_columns, *targets]
            small = np.asarray(np.linalg.qr(self.R[:, columns], mode="r"))
            right = small[:, -self.n_y :]
            # squares from row p on are what p columns leave unexplained
            left = np.cumsum((right**2)[::-1], axis=0)[::-1]
            for n_b in range(1, self.n_b_max + 1):
                p = n_a * self.n_y + n_b * self.n_in
                losses = left[p] / self.rows if p < len(left) else np.zeros(self.n_y)
                loss = float(np.exp(np.log(np.maximum(losses, 1e-300)).mean()))
                c = criteria(loss, p, self.rows)
                self.tried[n_a, n_b, n_k] = Orders(
                    n_a, n_b, n_k, loss, self.n_y * c["aicc"], self.n_y * c["bic"]
                )
