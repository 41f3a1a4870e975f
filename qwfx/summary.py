"""What is in a file, at a glance: a list of headed lines made from the model, cheap even for the biggest file."""

from __future__ import annotations

from collections import Counter
from pathlib import Path

import numpy as np

from qwfx.elements import SYMBOLS
from qwfx.model import Basis, Energies, Expansion, Hamiltonian, OrbitalSet, Potentials, System, Wavefunction

__all__ = ["summarise"]

SHELL_LETTERS = "spdfghiklmnoqrtuvwxyz"  # j is left out by custom, p and s are taken


def _formula(system: System) -> str:
    """Hill order: carbon, hydrogen, then the alphabet; ghosts apart."""
    real = [int(z) for z, q in zip(system.atomic_numbers, system.effective_charges, strict=True) if q > 0]
    counts = Counter(SYMBOLS[z] if 0 <= z < len(SYMBOLS) else "?" for z in real)
    first = [s for s in ("C", "H") if s in counts] if "C" in counts else []
    order = first + sorted(set(counts) - set(first))
    text = "".join(s + (str(counts[s]) if counts[s] > 1 else "") for s in order)
    ghosts = system.n_atoms - len(real)
    return text + (f" and {ghosts} ghost centre{'s' if ghosts > 1 else ''}" if ghosts else "")


def _system_lines(system: System) -> list[tuple[str, str]]:
    spin = system.n_up - system.n_down
    electrons = f"{system.n_up} up, {system.n_down} down (2 S_z = {spin})"
    if not system.n_atoms:
        return [("system", "no nuclei in the file"), ("electrons", electrons)]
    charge = float(system.effective_charges.sum()) - system.n_electrons
    state = "neutral" if abs(charge) < 1e-9 else f"charge {charge:+.4g}"
    lines = [("system", f"{_formula(system)}, {state}"), ("electrons", electrons)]
    if system.n_atoms > 1:
        near = min(
            float(np.linalg.norm(system.positions[a + 1 :] - system.positions[a], axis=1).min())
            for a in range(system.n_atoms - 1)
        )
        lines.append(("geometry", f"{system.n_atoms} centres, nearest pair {near:.4f} bohr"))
    if system.cell is not None:
        lines.append(("cell", f"periodic, {len(system.cell.kpoints)} k-points"))
    return lines


def _potential_line(system: System, potentials: Potentials) -> str:
    atoms = sorted({int(c) for c in potentials.center})
    names = [system.labels[a] for a in atoms if 0 <= a < system.n_atoms]
    shown = ", ".join(names[:6]) + (f" and {len(names) - 6} more" if len(names) > 6 else "")
    removed = float((system.atomic_numbers[atoms] - system.effective_charges[atoms]).sum()) if names else 0.0
    return f"on {shown}: {len(potentials.center)} terms, {removed:g} core electrons replaced"


def _basis_line(basis: Basis) -> str:
    counts = Counter(int(angular) for angular in basis.shell_l)
    letters = {a: SHELL_LETTERS[a] if a < len(SHELL_LETTERS) else f"(l={a})" for a in counts}
    shells = " ".join(f"{counts[a]}{letters[a]}" for a in sorted(counts))
    monomial = int(np.count_nonzero(basis.shell_monomial))
    kind = "solid" if not monomial else "monomial" if monomial == basis.n_shells else "mixed solid and monomial"
    return (
        f"{basis.radial}, {basis.n_functions} functions in {basis.n_shells} {kind} shells ({shells}), "
        f"{len(basis.exponents)} primitives"
    )


def _orbital_line(s: OrbitalSet) -> str:
    kind = "complex" if np.dtype(s.coefficients.dtype).kind == "c" else "real"
    extras = [w for w in ("energies", "occupations", "roles", "irreps") if getattr(s, w) is not None]
    text = f"{s.n_orbitals} {kind} orbitals, spin {s.spin}" + (f", with {', '.join(extras)}" if extras else "")
    if s.occupations is not None:
        text += f"; {float(np.sum(s.occupations)):.6g} electrons"
    return text


def _expansion_line(e: Expansion) -> str:
    states, entries = (int(n) for n in e.coefficients.shape)
    return (
        f"{entries} determinant{'s' if entries != 1 else ''} of {len(e.up_strings)} up and {len(e.down_strings)} down "
        f"strings, {states} state{'s' if states != 1 else ''}, over {e.up_set} / {e.down_set}"
    )


def _hamiltonian_line(h: Hamiltonian) -> str:
    kind = ("complex " if h.complex_orbitals else "") + ("spin-resolved" if h.spin_resolved else "spin-restricted")
    stored = sum(int(t.values.shape[0]) for t in h.two_body.values())
    sparse = "sparse" if any(t.index is not None for t in h.two_body.values()) else "dense"
    return (
        f"{h.n_orbitals} orbitals, {kind}, {stored} two-electron integrals ({sparse}), "
        f"core energy {h.core_energy:.8f} hartree"
    )


def _energy_lines(energies: Energies) -> list[tuple[str, str]]:
    rows = zip(energies.quantity, energies.method, energies.state, energies.value, energies.uncertainty, strict=True)
    return [
        ("energy", f"{v:.9f} hartree, {q}, {m}, state {s}" + (f", +- {u:.2g}" if u else ""))
        for q, m, s, v, u in list(rows)[:8]
    ]


def summarise(wavefunction: Wavefunction, path: Path | None = None) -> list[tuple[str, str]]:
    """Headed lines on everything in a wave function, in the order of the format."""
    w = wavefunction
    lines = _system_lines(w.system)
    if w.potentials is not None and len(w.potentials.center):
        lines.append(("potentials", _potential_line(w.system, w.potentials)))
    if w.basis is not None:
        lines.append(("basis", _basis_line(w.basis)))
    lines += [(f"orbitals {name}", _orbital_line(s)) for name, s in w.orbitals.items()]
    if w.expansion is not None:
        lines.append(("expansion", _expansion_line(w.expansion)))
    lines += [(f"Jastrow {name}", f"form {term.form}") for name, term in w.jastrow.items()]
    if w.hamiltonian is not None:
        lines.append(("Hamiltonian", _hamiltonian_line(w.hamiltonian)))
    if w.densities is not None:
        kinds = [f"one-body {k}" for k in w.densities.one_body] + [f"two-body {k}" for k in w.densities.two_body]
        lines.append(("densities", ", ".join(kinds)))
    if w.energies is not None:
        lines += _energy_lines(w.energies)
    if w.witness is not None:
        independent = "independent of qwfx" if w.witness.independent else "not independent of qwfx"
        evaluator = f"{w.witness.evaluator} {w.witness.evaluator_version}"
        whole = w.witness.configurations
        places = f"{len(w.witness.points)} points" + (f", {len(whole.positions)} configurations" if whole else "")
        lines.append(("witness", f"{places} by {evaluator}, {independent}"))
    for step in w.provenance.steps[-3:]:
        lines.append(("made by", f"{step.get('activity', '?')}, {step.get('agent', '?')}, {step.get('time', '?')}"))
    lines += [("extension", f"{name} (carried along, not interpreted)") for name in w.extensions]
    lines += [("not read", f"{member} (from a newer minor version)") for member in w.unread]
    return lines
