"""The example of FORMAT.md: stretched hydrogen with core potentials, two orbitals, two determinants, a Pade factor.

Everything is computed here with PySCF and NumPy, so that the witness is independent of the package.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx import model

Array = NDArray[np.float64]

FORMAT = Path(__file__).parents[1] / "schema" / "FORMAT.md"
POSITIONS = np.array([[0.0, 0.0, -0.8], [0.0, 0.0, 0.8]])
S_SHELL = [[3.42525091, 0.15432897], [0.62391373, 0.53532814], [0.1688554, 0.44463454]]
P_SHELL = [[0.727, 1.0]]
# Rough orbitals on s, p_y, p_z, p_x of both atoms; made orthonormal below.
ROUGH = np.array([[0.55, 0, 0.03, 0, 0.55, 0, -0.03, 0], [1.1, 0, 0.02, 0, -1.1, 0, 0.02, 0]])
Y_Z_X = [0, 2, 3, 1, 4, 6, 7, 5]  # PySCF orders p functions x, y, z
PADE_A, PADE_B = 0.5, 1.2
CORE = {"ccecp": [(1, 21.24359508, 1.0), (2, 21.77696655, -10.85192405), (3, 21.24359508, 21.24359508)]}


def molecule() -> Any:
    """H2 in PySCF, with the core potential of the table above."""
    from pyscf import gto

    return gto.M(
        atom=[["H", p] for p in POSITIONS], unit="Bohr", basis={"H": [[0, *S_SHELL], [1, *P_SHELL]]}, ecp={"H": "ccecp"}
    )


def orbitals(mol: Any) -> Array:
    """(F, 2) in PySCF's order of functions: `ROUGH`, made orthonormal symmetrically."""
    rough = np.zeros((8, 2))
    rough[Y_Z_X] = ROUGH.T
    overlap = rough.T @ mol.intor("int1e_ovlp") @ rough
    value, vector = np.linalg.eigh(overlap)
    return np.asarray(rough @ (vector / np.sqrt(value)) @ vector.T)


def pade(r: Array) -> tuple[Array, Array, Array]:
    """u, u', u''."""
    below = 1 + PADE_B * r
    return PADE_A * r / below, PADE_A / below**2, -2 * PADE_A * PADE_B / below**3


def potential_energy(configuration: Array) -> float:
    """V of one configuration (2, 3): nuclei with core potential, the two electrons, repulsion of the nuclei."""
    total = 1 / np.linalg.norm(configuration[0] - configuration[1]) + 1 / np.linalg.norm(POSITIONS[0] - POSITIONS[1])
    for electron in configuration:
        for centre in POSITIONS:
            r = np.linalg.norm(electron - centre)
            total += -1 / r + sum(c * r ** (n - 2) * np.exp(-a * r * r) for n, a, c in CORE["ccecp"])
    return float(total)


def everything() -> model.Wavefunction:
    """The whole example; no dataset that depends on a sign or a phase which a library may choose."""
    mol = molecule()
    c = orbitals(mol)
    one_body = c.T @ (mol.intor("int1e_kin") + mol.intor("int1e_nuc") + mol.intor("ECPscalar")) @ c
    two_body = np.einsum("abcd,ap,bq,cr,ds->pqrs", mol.intor("int2e"), c, c, c, c)
    repulsion = float(mol.energy_nuc())
    ci = two_determinants(one_body, two_body)
    energy = repulsion + float(
        sum(w * w * (2 * one_body[p, p] + two_body[p, p, p, p]) for p, w in enumerate(ci))
        + 2 * ci[0] * ci[1] * two_body[0, 1, 0, 1]
    )
    packed = [two_body[p, q, r, s] for p in range(2) for q in range(p + 1) for r in range(2) for s in range(r + 1)
              if p * (p + 1) // 2 + q >= r * (r + 1) // 2 + s]  # fmt: skip
    gamma = np.diag(2 * ci**2)[None]
    pair = np.zeros((1, 2, 2, 2, 2))
    for p in range(2):
        for q in range(2):
            pair[0, p, q, p, q] = 2 * ci[p] * ci[q]
    n = len(CORE["ccecp"])
    table = np.array(CORE["ccecp"] * 2)
    return model.Wavefunction(
        model.System(1, 1, ("H1", "H2"), np.array([1, 1], "i4"), np.ones(2), POSITIONS),
        potentials=model.Potentials(
            np.repeat([0, 1], n).astype("i4"), np.full(2 * n, -1, "i4"), (table[:, 0] - 2).astype("i4"),
            table[:, 1], table[:, 2],
        ),
        basis=basis(mol),
        orbitals={
            "spatial": model.OrbitalSet(
                "both", c[Y_Z_X].T.copy(), energies=np.array([one_body[p, p] + 2 * two_body[p, p, 0, 0]
                                                              - two_body[p, 0, 0, p] for p in range(2)]),
                occupations=np.diag(gamma[0]).copy(), roles=("active", "active"), irreps=("A1g", "A1u"),
            )
        },
        expansion=model.Expansion(
            "spatial", "spatial", np.array([[1], [2]], "u8"), np.array([[1], [2]], "u8"), np.array([0, 1, 2]),
            np.array([0, 1]), ci[None], discarded_weight=np.zeros(1),
        ),
        jastrow={
            "pairs": model.JastrowTerm(
                "pade", {"body": "electron-electron"},
                {"channel": np.array(["up_down"]), "a": np.array([PADE_A]), "b": np.array([PADE_B])},
            )
        },
        hamiltonian=model.Hamiltonian(
            2, repulsion, {"both": one_body}, {"both": model.TwoBody(np.array(packed))}, up_set="spatial",
            down_set="spatial", orbital_symmetry=np.array([0, 1], "i4"), state_symmetry=0,
        ),
        densities=model.Densities({"both": gamma}, {"both": pair}),
        energies=model.Energies(
            np.zeros(2, "i4"), ("CASCI(2,2)", "classical"), np.array([energy, repulsion]), np.zeros(2),
            ("total", "nuclear-repulsion"),
        ),
        witness=witness(mol, c, ci),
        provenance=model.Provenance((
            {"activity": "computed the example of FORMAT.md", "agent": "example_file.py 1",
             "time": "2026-01-01T00:00:00Z", "used": [], "generated": [],
             "notes": ["orbitals orthonormal, but of no Hartree-Fock calculation"]},
        )),
        extensions={"observatory": model.Node({"telescope": "small"}, {"readings": np.array([1.5, 2.5], "f4")})},
    )  # fmt: skip


def two_determinants(one_body: Array, two_body: Array) -> Array:
    """Lower state of the 2x2 full CI of two electrons in g and u: the mixing angle in closed form."""
    lower, upper = (2 * one_body[p, p] + two_body[p, p, p, p] for p in range(2))
    angle = 0.5 * np.arctan2(2 * two_body[0, 1, 0, 1], upper - lower)
    return np.array([np.cos(angle), -np.sin(angle)])


def basis(mol: Any) -> model.Basis:
    """The functions as PySCF defines them, every factor in the coefficients."""
    start, exponents, coefficients = [0], [], []
    for shell in range(mol.nbas):
        exponents += list(mol.bas_exp(shell))
        coefficients += list(mol._libcint_ctr_coeff(shell)[:, 0])
        start.append(len(exponents))
    return model.Basis(
        "gaussian", np.array([0, 0, 1, 1], "i4"), np.array([0, 1, 0, 1], "i4"), np.zeros(4, "i1"), np.array(start),
        np.array(exponents), np.array(coefficients),
    )  # fmt: skip


def witness(mol: Any, c: Array, ci: Array) -> model.Witness:
    """Orbitals at six points, the trial function at three configurations."""
    import pyscf

    points = np.array([[0.1, 0.2, -0.7], [-0.3, 0.1, 0.9], [0.4, -0.5, 0.2], [0.05, 0.6, -0.1], [1.1, 0.7, 1.9],
                       [-0.8, 1.6, -2.3]])  # fmt: skip

    def at(places: Array) -> tuple[Array, Array, Array]:
        d = mol.eval_gto("GTOval_sph_deriv2", places)
        return d[0] @ c, np.moveaxis(d[1:4] @ c, 0, -1), (d[4] + d[7] + d[9]) @ c

    configurations = np.array([[points[0], points[1]], [points[2], points[3]], [points[4], points[0]]])
    value, gradient, laplacian = at(configurations.reshape(-1, 3))
    value, gradient, laplacian = (a.reshape(3, 2, *a.shape[1:]) for a in (value, gradient, laplacian))
    d = np.einsum("p,kp,kp->k", ci, value[:, 0], value[:, 1])
    grad = np.stack([np.einsum("p,kpx,kp->kx", ci, gradient[:, i], value[:, 1 - i]) for i in range(2)], axis=1)
    grad = grad / d[:, None, None]
    lap = sum(np.einsum("p,kp,kp->k", ci, laplacian[:, i], value[:, 1 - i]) for i in range(2)) / d
    apart = configurations[:, 0] - configurations[:, 1]
    r = np.linalg.norm(apart, axis=-1)
    _, slope, curvature = pade(r)
    grad_j = (slope / r)[:, None] * apart
    # (laplacian Psi)/Psi of both electrons, whose gradients of J are opposite
    whole = lap + 2 * np.einsum("kx,kx->k", grad[:, 0] - grad[:, 1], grad_j)
    whole = whole + 2 * (curvature + 2 * slope / r) + 2 * slope**2
    potential = np.array([potential_energy(k) for k in configurations])
    values, gradients, laplacians = at(points)
    return model.Witness(
        "PySCF", pyscf.__version__, True, points,
        {"spatial": model.WitnessOrbitals(values, gradients, laplacians)},
        model.WitnessConfigurations(
            configurations, np.log(np.abs(d))[None], np.sign(d)[None], grad[None], lap[None], potential[None],
            (-0.5 * whole + potential)[None],
        ),
    )  # fmt: skip
