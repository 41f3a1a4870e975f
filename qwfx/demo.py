"""The built-in scenario: three molecules that a buoy off the invented harbour of Port Ansel finds in sea spray.

Water (all-electron), hydrogen chloride (core potential on chlorine) and the hydroxyl radical (open shell) are computed
with PySCF, written, validated, taken through Molden and FCIDUMP and back, and compared; then a copy of the water file
is broken on purpose, and the validator catches it. Everything is real: nothing here is looked up.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from qwfx.findings import Report
from qwfx.model import Wavefunction

__all__ = ["MOLECULES", "Molecule", "break_on_purpose", "compute", "run_demo"]


@dataclass(frozen=True)
class Molecule:
    """One molecule of the scenario. Geometry in angstrom, from handbook bond lengths (values from memory)."""

    name: str
    title: str
    atoms: str
    basis: str
    core_potential: str | None = None
    spin: int = 0


MOLECULES = (
    Molecule("water", "water, all-electron", "O 0 0 0.1173; H 0 0.7572 -0.4692; H 0 -0.7572 -0.4692", "cc-pvdz"),
    Molecule(
        "hydrogen-chloride", "hydrogen chloride, core potential on chlorine",
        "Cl 0 0 0; H 0.35 0.61 1.0633", "ccecpccpvdz", core_potential="ccecp",
    ),
    Molecule("hydroxyl", "hydroxyl radical, open shell", "O 0 0 0; H 0.3 0.4 0.831", "6-31g", spin=1),
)  # fmt: skip

Say = Callable[[str], None]


def compute(molecule: Molecule, folder: Path) -> tuple[Any, Path]:
    """SCF by PySCF; the mean-field object and the checkpoint it left."""
    from pyscf import gto, scf

    mol = gto.M(
        atom=molecule.atoms, basis=molecule.basis, ecp=molecule.core_potential or {}, spin=molecule.spin, verbose=0
    )
    mf = scf.UHF(mol) if molecule.spin else scf.RHF(mol)
    checkpoint = folder / f"{molecule.name}.chk"
    mf.chkfile = str(checkpoint)
    mf.conv_tol = 1e-12
    mf.kernel()
    return mf, checkpoint


def _verdict(report: Report) -> str:
    from qwfx.findings import Outcome, Severity

    passed = sum(r.outcome is Outcome.PASSED for r in report.results)
    words = [f"{passed} rules passed"]
    for severity in Severity:
        if report.count(severity):
            words.append(f"{report.count(severity)} {severity.value}s")
    state = {0: "valid", 1: "NOT VALID", 2: "could not be checked"}[int(report.exit_code)]
    return f"{state} ({', '.join(words)})"


def _file_and_back(molecule: Molecule, folder: Path, say: Say) -> bool:
    """Everything that is done with one molecule; whether all of it came out right."""
    from qwfx.compare.roundtrip import roundtrip
    from qwfx.conversion import convert
    from qwfx.converters.pyscf import energy
    from qwfx.storage import load
    from qwfx.validate import validate

    mf, checkpoint = compute(molecule, folder)
    say(f"\n{molecule.title}")
    say(f"  PySCF SCF energy                 {mf.e_tot:16.9f} hartree")
    target = folder / f"{molecule.name}.qwfx"
    convert(checkpoint, target, options={"hamiltonian": "yes"}, overwrite=True)
    report = validate(target)
    say(f"  {target.name:32} {_verdict(report)}")
    again = energy(load(target))
    say(f"  energy recomputed from the file  {again:16.9f} hartree, off by {abs(again - mf.e_tot):.0e}")
    good = int(report.exit_code) == 0 and abs(again - mf.e_tot) < 1e-9
    for through, suffix in (("molden", ".molden"), ("fcidump", ".fcidump")):
        convert(target, folder / f"{molecule.name}{suffix}", overwrite=True)
        result = roundtrip(target, _subfolder(folder, molecule.name, through), through=through)
        what = "orbital values" if through == "molden" else "integrals"
        say(f"  through {through:8} and back: {what:15} {'the same' if result.same else 'DIFFERENT'}, "
            f"worst difference {result.worst:.0e}")  # fmt: skip
        good = good and result.same
    return good


def _subfolder(folder: Path, name: str, through: str) -> Path:
    path = folder / "round-trips" / f"{name}-{through}"
    path.mkdir(parents=True, exist_ok=True)
    return path


def break_on_purpose(wavefunction: Wavefunction) -> Wavefunction:
    """The same file as a careless converter would have written it: p functions in the order x, y, z instead of y, z, x.

    It is schema-valid, its orbitals are still orthonormal for an atom's own functions, and its digests are right: only
    its meaning is wrong.
    """
    assert wavefunction.basis is not None
    orbitals = {}
    for name, s in wavefunction.orbitals.items():
        coefficients = np.array(s.coefficients)
        for start, angular in zip(wavefunction.basis.function_start, wavefunction.basis.shell_l, strict=False):
            if angular == 1:
                block = slice(int(start), int(start) + 3)
                coefficients[:, block] = np.roll(coefficients[:, block], 1, axis=1)
        orbitals[name] = dataclasses.replace(s, coefficients=coefficients)
    return dataclasses.replace(wavefunction, orbitals=orbitals)


def run_demo(folder: Path, say: Say) -> tuple[bool, Report]:
    """Run the scenario in `folder`, saying what happens line by line.

    Returns whether everything came out as it should, and the report on the broken copy.
    """
    from qwfx.storage import load, save
    from qwfx.validate import validate

    folder.mkdir(parents=True, exist_ok=True)
    good = True
    for molecule in MOLECULES:
        good = _file_and_back(molecule, folder, say) and good
    broken = folder / "water-broken.qwfx"
    save(break_on_purpose(load(folder / "water.qwfx")), broken, overwrite=True)
    report = validate(broken)
    say("\na copy of the water file with its p functions in another order, as a careless converter writes them")
    say(f"  {broken.name:32} {_verdict(report)}")
    return good and int(report.exit_code) == 1, report
