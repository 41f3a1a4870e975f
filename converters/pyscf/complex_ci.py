"""Full CI with complex orbitals: PySCF has none of one spin an orbital, so the product H c is formed here.

With ``E_pq = sum_sigma p+_sigma q_sigma`` the Hamiltonian is
``sum_sigma k^sigma_pq E^sigma_pq + 1/2 sum (pq|rs)^{sigma tau} E^sigma_pq E^tau_rs`` with
``k^sigma_pq = h^sigma_pq - 1/2 sum_r (pr|rq)^{sigma sigma}`` (Knowles and Handy, Chem. Phys. Lett. 111, 315 (1984)).
The matrices of E over the strings of one spin come from PySCF's tables of string links.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Hamiltonian

__all__ = ["lowest_energies"]

DENSE_UP_TO = 600  # determinants; smaller spaces are diagonalised whole


def lowest_energies(hamiltonian: Hamiltonian, n_up: int, n_down: int, nroots: int) -> NDArray[np.float64]:
    """(nroots) lowest energies (hartree, core energy included), ascending; real or complex orbitals."""
    from scipy.sparse.linalg import LinearOperator, eigsh

    product = _Product(hamiltonian, n_up, n_down)
    size = product.shape[0] * product.shape[1]
    nroots = min(nroots, size)

    def apply(vector: NDArray[Any]) -> NDArray[Any]:
        return product(np.asarray(vector).reshape(product.shape)).ravel()

    if size <= DENSE_UP_TO:
        matrix = np.column_stack([apply(column) for column in np.eye(size)])
        values = np.linalg.eigvalsh(matrix)[:nroots]
    else:
        operator = LinearOperator((size, size), matvec=apply, dtype=np.complex128)
        start = np.random.default_rng(0).normal(size=size)
        values = eigsh(operator, k=nroots, which="SA", tol=1e-12, v0=start, return_eigenvectors=False)
    return np.sort(np.real(values)) + hamiltonian.core_energy


class _Product:
    """H c for vectors over (up strings, down strings), without the core energy."""

    def __init__(self, hamiltonian: Hamiltonian, n_up: int, n_down: int) -> None:
        n = self.n = hamiltonian.n_orbitals
        up_key, down_key = ("up", "down") if hamiltonian.spin_resolved else ("both", "both")
        self.repulsion = {
            (0, 0): _tensor(hamiltonian, "up_up", like=True),
            (1, 1): _tensor(hamiltonian, "down_down", like=True),
            (0, 1): _tensor(hamiltonian, "up_down", like=False),
        }
        self.one_electron = [
            np.asarray(hamiltonian.one_body[key]) - 0.5 * np.einsum("prrq->pq", self.repulsion[s, s])
            for s, key in enumerate((up_key, down_key))
        ]
        self.moves = [_excitations(n, n_up), _excitations(n, n_down)]
        self.shape = (self.moves[0][0].shape[0], self.moves[1][0].shape[0])

    def _excite(self, spin: int, pq: int, vector: NDArray[Any]) -> NDArray[Any]:
        matrix = self.moves[spin][pq]
        return np.asarray(matrix @ vector if spin == 0 else (matrix @ vector.T).T)

    def __call__(self, vector: NDArray[Any]) -> NDArray[Any]:
        pairs = self.n * self.n
        excited = [np.array([self._excite(s, rs, vector) for rs in range(pairs)]) for s in (0, 1)]
        total = np.zeros(self.shape, dtype=np.complex128)
        unlike = self.repulsion[0, 1].reshape(pairs, pairs)
        for spin in (0, 1):
            like = self.repulsion[spin, spin].reshape(pairs, pairs)
            field = 0.5 * np.tensordot(like, excited[spin], axes=1)
            if spin == 0:  # (pq|rs) E^up_pq E^down_rs once: the two orders of the spins cancel the factor 1/2
                field += np.tensordot(unlike, excited[1], axes=1)
            field += self.one_electron[spin].reshape(pairs)[:, None, None] * vector
            for pq in range(pairs):
                total += self._excite(spin, pq, field[pq])
        return total


def _tensor(hamiltonian: Hamiltonian, key: str, *, like: bool) -> NDArray[Any]:
    """(n, n, n, n) integrals (pq|rs) of one pair of spins."""
    from qwfx.kernels.packing import dense, unpack

    n = hamiltonian.n_orbitals
    if not hamiltonian.spin_resolved:
        key, like = "both", True
    packing = "pairs" if hamiltonian.complex_orbitals else "eightfold" if like else "fourfold"
    table = hamiltonian.two_body[key]
    return unpack(dense(table.values, table.index, packing, n, like), packing, n, like)


def _excitations(n: int, electrons: int) -> list[Any]:
    """For each pq = p n + q the sparse matrix <I|p+ q|J> over the strings of `electrons` electrons in n orbitals."""
    from pyscf.fci import cistring
    from scipy.sparse import csr_matrix

    size = int(cistring.num_strings(n, electrons))
    if electrons == 0:
        return [csr_matrix((1, 1)) for _ in range(n * n)]
    links = cistring.gen_linkstr_index(range(n), electrons)  # (size, links, 4): creation, annihilation, target, sign
    source = np.repeat(np.arange(size), links.shape[1])
    creation, annihilation, target, sign = links.reshape(-1, 4).T
    matrices = []
    for p in range(n):
        for q in range(n):
            chosen = (creation == p) & (annihilation == q)
            entries = sign[chosen].astype(np.float64)
            matrices.append(csr_matrix((entries, (target[chosen], source[chosen])), shape=(size, size)))
    return matrices
