"""How large the parts are whose sum is J, its gradient or its Laplacian: what rounding errors are measured by."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from qwfx.model import JastrowTerm
from qwfx.reference.jastrow import radial_function, three_body_function

__all__ = ["Sized", "sizes"]


@dataclass(frozen=True)
class Sized:
    """A number with the sum of the magnitudes of all that was added up to it."""

    x: float
    size: float

    @staticmethod
    def of(x: Any) -> Sized:
        return x if isinstance(x, Sized) else Sized(float(x), abs(float(x)))

    def __add__(self, other: Any) -> Sized:
        o = Sized.of(other)
        return Sized(self.x + o.x, self.size + o.size)

    def __neg__(self) -> Sized:
        return Sized(-self.x, self.size)

    def __sub__(self, other: Any) -> Sized:
        return self + (-Sized.of(other))

    def __rsub__(self, other: Any) -> Sized:
        return -self + other

    def __mul__(self, other: Any) -> Sized:
        o = Sized.of(other)
        return Sized(self.x * o.x, self.size * o.size)

    def __truediv__(self, other: Any) -> Sized:
        o = Sized.of(other)
        return Sized(self.x / o.x, self.size / abs(o.x))

    def __rtruediv__(self, other: Any) -> Sized:
        return Sized.of(other) / self

    def __pow__(self, n: int) -> Sized:
        return Sized(self.x**n, self.size**n)

    def __abs__(self) -> Sized:
        return Sized(abs(self.x), self.size)

    def __ge__(self, other: Any) -> bool:
        return self.x >= Sized.of(other).x

    def __le__(self, other: Any) -> bool:
        return self.x <= Sized.of(other).x

    __radd__ = __add__
    __rmul__ = __mul__


def sizes(
    terms: Mapping[str, JastrowTerm], n_up: int, nuclei: np.ndarray, electrons: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Of J (W), of its gradients (W, N, 1) and of its Laplacians (W, N), at electrons (W, N, 3)."""
    n_walkers, n = electrons.shape[:2]
    value, gradient, laplacian = np.zeros(n_walkers), np.zeros((n_walkers, n)), np.zeros((n_walkers, n))
    for w, x in enumerate(electrons):
        for term in terms.values():
            rows = {str(word): row for row, word in enumerate(term.members["channel"])}
            body = term.attributes["body"]
            centres = nuclei[term.members["atoms"]] if "atoms" in term.members else []

            def two(i: int, d: np.ndarray, row: int, w: int = w, term: JastrowTerm = term) -> float:
                r = float(np.linalg.norm(d))
                u = [part.size for part in radial_function(term, row)(Sized(r, r))]
                gradient[w, i] += u[1]
                laplacian[w, i] += u[2] + 2 * u[1] / r
                return float(u[0])

            if body == "electron-nucleus":
                for i in range(n):
                    if (row := rows.get("up" if i < n_up else "down")) is not None:
                        value[w] += sum(two(i, x[i] - nucleus, row) for nucleus in centres)
                continue
            for i in range(n):
                for j in range(i + 1, n):
                    channel = "up_up" if j < n_up else "up_down" if i < n_up else "down_down"
                    if channel not in rows:
                        continue
                    row = rows[channel]
                    if body == "electron-electron":
                        value[w] += two(i, x[i] - x[j], row)
                        two(j, x[j] - x[i], row)
                        continue
                    for nucleus in centres:
                        r = [float(np.linalg.norm(d)) for d in (x[i] - nucleus, x[j] - nucleus, x[i] - x[j])]
                        f = [part.size for part in three_body_function(term, row)(*(Sized(d, d) for d in r))]
                        value[w] += f[0]
                        pair = f[6] + 2 * f[3] / r[2]
                        gradient[w, i] += f[1] + f[3]
                        gradient[w, j] += f[2] + f[3]
                        laplacian[w, i] += f[4] + 2 * f[1] / r[0] + pair + 2 * f[7]
                        laplacian[w, j] += f[5] + 2 * f[2] / r[1] + pair + 2 * f[8]
    return value, gradient[..., None], laplacian
