"""What is written is read back exactly; what is scrambled in every allowed way means the same."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from pyscf import ao2mo, fci, gto, scf
from pyscf.tools import fcidump

from qwfx.converters.fcidump import converter
from qwfx.errors import ConversionError, QwfxError, UnsupportedError
from qwfx.kernels.packing import dense, unpack
from qwfx.model import Hamiltonian, System, TwoBody, Wavefunction
from qwfx.reference.packing import pack, packed_length

FAST = settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def full_tensor(rng: np.random.Generator, n: int, is_complex: bool, like: bool, zeros: float) -> NDArray[np.generic]:
    """Random integrals with all the symmetry of their kind, and whole classes of them zero."""
    full = rng.normal(size=(n,) * 4) * 10.0 ** rng.integers(-12, 3, size=(n,) * 4)
    if is_complex:
        full = full + 1j * rng.normal(size=(n,) * 4)
    full = np.where(rng.random(size=(n,) * 4) < zeros, 0, full)
    if like:
        full = full + full.transpose(2, 3, 0, 1)
    if is_complex:
        return np.asarray(full + full.transpose(1, 0, 3, 2).conj())
    full = full + full.transpose(1, 0, 2, 3)
    return np.asarray(full + full.transpose(0, 1, 3, 2))


def hamiltonian(seed: int, n: int, resolved: bool, is_complex: bool, zeros: float, energies: bool) -> Hamiltonian:
    rng = np.random.default_rng(seed)
    n = max(n, 2) if is_complex else n  # one complex orbital has real integrals, and is read as real
    spins = ("up", "down") if resolved else ("both",)
    one = {}
    for spin in spins:
        h = rng.normal(size=(n, n)) + (1j * rng.normal(size=(n, n)) if is_complex else 0)
        one[spin] = h + h.conj().T
    two = {}
    for pair in ("up_up", "up_down", "down_down") if resolved else ("both",):
        like = pair != "up_down"
        packing = "pairs" if is_complex else "eightfold" if like else "fourfold"
        two[pair] = TwoBody(pack(full_tensor(rng, n, is_complex, like, zeros), packing, like))
    return Hamiltonian(
        n, float(rng.normal()), one, two, complex_orbitals=is_complex,
        orbital_energies={spin: rng.normal(size=n) for spin in spins} if energies else {},
    )  # fmt: skip


def wrap(h: Hamiltonian, n_up: int = 1, n_down: int = 1) -> Wavefunction:
    nothing = np.zeros(0)
    return Wavefunction(System(n_up, n_down, (), nothing.astype("i4"), nothing, nothing.reshape(0, 3)), hamiltonian=h)


def through(h: Hamiltonian, path: Path, **options: str) -> Hamiltonian:
    converter.write(wrap(h), path, {"threshold": "0", **{k.replace("_", "-"): v for k, v in options.items()}})
    found = converter.read(path, {}).wavefunction.hamiltonian
    assert found is not None
    return found


def assert_same(a: Hamiltonian, b: Hamiltonian) -> None:
    assert (a.n_orbitals, a.core_energy, a.complex_orbitals) == (b.n_orbitals, b.core_energy, b.complex_orbitals)
    assert a.one_body.keys() == b.one_body.keys()
    for key, one in a.one_body.items():
        np.testing.assert_array_equal(one, b.one_body[key])
    assert a.two_body.keys() == b.two_body.keys()
    for key, table in a.two_body.items():
        like = key != "up_down"
        packing = "pairs" if a.complex_orbitals else "eightfold" if like else "fourfold"
        tables = [dense(t.values, t.index, packing, a.n_orbitals, like) for t in (table, b.two_body[key])]
        np.testing.assert_array_equal(*tables)
    assert a.orbital_energies.keys() == b.orbital_energies.keys()
    for key, energies in a.orbital_energies.items():
        np.testing.assert_array_equal(energies, b.orbital_energies[key])


HAMILTONIANS = st.builds(
    hamiltonian, st.integers(0, 10_000), st.integers(1, 5), st.booleans(), st.booleans(),
    st.sampled_from([0.0, 0.5, 0.95]), st.booleans(),
)  # fmt: skip


@given(HAMILTONIANS, st.sampled_from(["interleaved", "blocks"]))
@FAST
def test_written_and_read(tmp_path: Path, h: Hamiltonian, layout: str) -> None:
    assert_same(h, through(h, tmp_path / "x.fcidump", spin_layout=layout))


@given(HAMILTONIANS, st.randoms(use_true_random=False), st.sampled_from(["interleaved", "blocks"]))
@FAST
def test_scrambled(tmp_path: Path, h: Hamiltonian, random: object, layout: str) -> None:
    """Lines in any order, indices in any equivalent order, some lines twice: the same Hamiltonian."""
    rng = np.random.default_rng(random.randint(0, 10**6))  # type: ignore[attr-defined]
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0", "spin-layout": layout})
    head, _, body = path.read_text().partition("&END\n")
    blocked = h.spin_resolved and layout == "blocks"
    groups: list[list[str]] = [[]]
    for line in body.splitlines():
        groups[-1].append(scramble(line, rng, exchange=not blocked or len(groups) != 3))
        if blocked and line.split()[-4:] == ["0"] * 4:
            groups.append([])
    lines = []
    for number, group in enumerate(groups):
        last = [group.pop()] if blocked and group else []
        copies = [line for line in group if rng.random() < 0.2]
        mixed = group + [scramble(line, rng, exchange=not blocked or number != 2) for line in copies]
        lines += [mixed[k] for k in rng.permutation(len(mixed))] + last
    path.write_text(head + "&END\n" + "\n".join(lines) + "\n")
    found = converter.read(path, {}).wavefunction.hamiltonian
    assert found is not None
    assert_same(h, found)


def scramble(line: str, rng: np.random.Generator, *, exchange: bool) -> str:
    """The same record with its indices in another equivalent order; in a block up-down the pairs keep their places."""
    value, indices = line[: line.rindex(")") + 1] if ")" in line else line.split()[0], line.split()[-4:]
    i, j, k, l = indices
    is_complex = ")" in line
    if "0" in indices and (j == "0" or k != "0"):
        return line
    if k == "0":
        swap = bool(rng.integers(2))
        i, j = (j, i) if swap else (i, j)
        return f"{conjugate(value) if swap and is_complex else value} {i} {j} {k} {l}"
    if is_complex:
        if rng.integers(2):
            value, i, j, k, l = conjugate(value), j, i, l, k
    else:
        i, j = (j, i) if rng.integers(2) else (i, j)
        k, l = (l, k) if rng.integers(2) else (k, l)
    if exchange and rng.integers(2):
        i, j, k, l = k, l, i, j
    return f"{value} {i} {j} {k} {l}"


def conjugate(value: str) -> str:
    real, imaginary = value.strip("() ").split(",")
    return f"({real},{-float(imaginary):.16E})"


def test_blocks_are_told_without_the_key(tmp_path: Path) -> None:
    h = hamiltonian(1, 3, True, False, 0.0, True)
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0", "spin-layout": "blocks"})
    path.write_text(path.read_text().replace("  UHF=.TRUE.,\n", ""))
    reading = converter.read(path, {})
    assert any("namelist does not say so" in note for note in reading.notes)
    assert reading.wavefunction.hamiltonian is not None
    assert_same(h, reading.wavefunction.hamiltonian)


@pytest.mark.parametrize("is_complex", [False, True])
def test_spin_orbitals_without_the_key(tmp_path: Path, is_complex: bool) -> None:
    """Never guessed from the numbers: said, and for the user to decide."""
    h = hamiltonian(1, 3, True, is_complex, 0.0, False)
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0"})
    text = path.read_text()
    path.write_text(text.replace("  UHF=.TRUE.,\n", ""))
    reading = converter.read(path, {})
    assert any("--set spins=resolved" in note for note in reading.notes)
    silent = reading.wavefunction.hamiltonian
    assert silent is not None
    assert not silent.spin_resolved
    assert silent.n_orbitals == 6
    assert_same(silent, through(silent, tmp_path / "y.fcidump"))
    told = converter.read(path, {"spins": "resolved"})
    assert told.wavefunction.hamiltonian is not None
    assert not any("--set spins" in note for note in told.notes)
    assert_same(h, told.wavefunction.hamiltonian)
    path.write_text(text)
    restricted = converter.read(path, {"spins": "restricted"}).wavefunction.hamiltonian
    assert restricted is not None
    assert_same(restricted, silent)


def test_two_molecules_far_apart_are_not_spin_orbitals(tmp_path: Path) -> None:
    """Their orbitals alternate and have no exchange: taken for spins, the energy was -1.06 instead of -2.27 hartree."""
    mol = gto.M(atom="H 0 0 0; H 0 0 1.4; H 0 0 2000; H 0 0 2001.4", unit="bohr", basis="sto-3g", verbose=0)
    c = scf.RHF(gto.M(atom="H 0 0 0; H 0 0 1.4", unit="bohr", basis="sto-3g", verbose=0)).run().mo_coeff
    both = np.zeros((4, 4))
    both[:2, ::2] = both[2:, 1::2] = c
    path = tmp_path / "x.fcidump"
    one = both.T @ scf.hf.get_hcore(mol) @ both
    fcidump.from_integrals(str(path), one, ao2mo.kernel(mol, both), 4, 4, mol.energy_nuc(), 0, tol=1e-9)
    reading = converter.read(path, {})
    h = reading.wavefunction.hamiltonian
    assert h is not None
    assert not h.spin_resolved
    assert any("--set spins=resolved" in note for note in reading.notes)
    table = h.two_body["both"]
    two = unpack(dense(table.values, table.index, "eightfold", 4), "eightfold", 4)
    energy = fci.direct_spin1.kernel(np.asarray(h.one_body["both"]), two, 4, (2, 2), ecore=h.core_energy)[0]
    assert energy == pytest.approx(2 * -1.1372759436170613, abs=1e-6)  # full CI of one molecule, PySCF


def test_a_model_without_exchange_stays_spin_restricted(tmp_path: Path) -> None:
    """Repulsion on four sites, hopping between neighbours."""
    sites = "".join(f"4.0 {i} {i} {i} {i}\n" for i in range(1, 5))
    path = tmp_path / "x.fcidump"
    path.write_text(f"&FCI NORB=4,NELEC=4,MS2=0 /\n{sites}-1 1 2 0 0\n-1 2 3 0 0\n-1 3 4 0 0\n-1 4 1 0 0\n0 0 0 0 0\n")
    h = converter.read(path, {}).wavefunction.hamiltonian
    assert h is not None
    assert not h.spin_resolved
    assert h.n_orbitals == 4


def test_norb_of_spatial_orbitals_with_spin_indices(tmp_path: Path) -> None:
    h = hamiltonian(2, 3, True, False, 0.0, False)
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0"})
    text = path.read_text()
    path.write_text(text.replace("NORB=6", "NORB=3").replace("ORBSYM=1,1,1,1,1,1", "ORBSYM=3*1"))
    reading = converter.read(path, {})
    assert any("NORB = 3 counts spatial orbitals" in note for note in reading.notes)
    assert reading.wavefunction.hamiltonian is not None
    assert_same(h, reading.wavefunction.hamiltonian)


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("resolved", [False, True])
def test_sparse_storage(tmp_path: Path, is_complex: bool, resolved: bool) -> None:
    """Big and nearly empty: stored by index, whichever way the records were collected."""
    n = 14 if not is_complex else 10
    h = hamiltonian(3, n, resolved, is_complex, 0.97, False)
    assert_same(h, through(h, tmp_path / "x.fcidump"))
    key = "up_down" if resolved else "both"
    some = np.random.default_rng(4).permutation(len(h.two_body[key].values))
    values = np.array(h.two_body[key].values)
    if not is_complex:
        values[some[: int(0.7 * len(some))]] = 0.0
    few = replace(h, two_body={**h.two_body, key: TwoBody(values)})
    found = through(few, tmp_path / "y.fcidump")
    assert_same(few, found)
    table = found.two_body[key]
    assert table.index is not None
    assert 2 * len(table.values) < packed_length(
        "pairs" if is_complex else "fourfold" if resolved else "eightfold", n, not resolved
    )
    assert np.all(np.diff(np.asarray(table.index).astype(np.int64)) > 0)
    assert np.asarray(table.values).all()
    assert_same(few, through(found, tmp_path / "z.fcidump"))  # and written from the sparse form


def test_contradiction_in_a_sparse_file(tmp_path: Path) -> None:
    head = "&FCI NORB=40,NELEC=2,MS2=0 /\n"
    body = "0.5 40 3 2 1\n" + "".join(f"1.0 {i} {i} {i} {i}\n" for i in range(1, 41)) + "-1.0 1 1 0 0\n"
    path = tmp_path / "x.fcidump"
    path.write_text(head + body + "0.5000000001 1 2 3 40\n")
    with pytest.raises(ConversionError, match="orbital 2 has two-electron and no one-electron"):
        converter.read(path, {})
    reading = converter.read(path, {"accept-incomplete": "yes"})
    assert "1 records repeat a number that an earlier one gives, and agree with it" in reading.notes
    assert reading.wavefunction.hamiltonian is not None
    assert len(reading.wavefunction.hamiltonian.two_body["both"].values) == 41
    path.write_text(head + body + "0.50001 1 2 3 40\n")
    with pytest.raises(ConversionError, match="line 2 says") as caught:
        converter.read(path, {})
    assert caught.value.where == f"{path}:44"


@pytest.mark.parametrize("resolved", [False, True])
@pytest.mark.parametrize("is_complex", [False, True])
def test_a_cut_between_one_electron_records_is_seen(tmp_path: Path, resolved: bool, is_complex: bool) -> None:
    """At every line end behind the two-electron integrals but the last one, which is the core energy."""
    h = hamiltonian(5, 3, resolved, is_complex, 0.0, False)
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0"})
    lines = path.read_text().splitlines(keepends=True)
    first = next(k for k, line in enumerate(lines) if line.split()[-2:] == ["0", "0"] and not line.startswith(" &"))
    n_orbitals = 3 * (1 + resolved)
    for end in range(first + 1, len(lines) - 1):
        path.write_text("".join(lines[:end]))
        indices = {int(i) for line in lines[first:end] for i in line.split()[-4:-2]}
        if len(indices) < n_orbitals:
            with pytest.raises(ConversionError, match="no one-electron integrals"):
                converter.read(path, {})


def test_no_two_electron_integrals_are_said(tmp_path: Path) -> None:
    path = tmp_path / "x.fcidump"
    path.write_text("&FCI NORB=2,NELEC=2,MS2=0 /\n-1.0 1 1 0 0\n-0.5 2 2 0 0\n0.7 0 0 0 0\n")
    assert any("no two-electron integrals" in note for note in converter.read(path, {}).notes)


def test_agreement_is_judged_by_the_digits_printed(tmp_path: Path) -> None:
    path = tmp_path / "x.fcidump"

    def read(one: str, other: str) -> None:
        path.write_text(f"&FCI NORB=2,NELEC=2 /\n{one} 1 1 2 2\n{other} 2 2 1 1\n-1.0 1 1 0 0\n0 0 0 0 0\n")
        converter.read(path, {})

    read("0.1234567", "0.12345674")  # the first is the second, rounded
    read("-2.74144905259126e-09", "-2.74144916794588e-09")  # rounding noise of computing, as in a real file
    read("0.12345678901234567", "0.12345678901200000")
    for one, other in [("0.1234567", "0.12345676"), ("0.12345678901", "0.12345678904"), ("0.5", "0.6"), ("1", "2")]:
        with pytest.raises(ConversionError, match="line 2 says"):
            read(one, other)


@pytest.mark.parametrize("n", [1, 3, 6])
def test_pyscf_reads_what_is_written_and_the_other_way_round(tmp_path: Path, n: int) -> None:
    h = hamiltonian(5, n, False, False, 0.3, False)
    path = tmp_path / "x.fcidump"
    converter.write(wrap(h), path, {"threshold": "0"})
    theirs = fcidump.read(str(path), verbose=False)
    assert (theirs["NORB"], theirs["NELEC"], theirs["MS2"], theirs["ECORE"]) == (n, 2, 0, h.core_energy)
    np.testing.assert_array_equal(theirs["H1"], h.one_body["both"])
    full = unpack(np.asarray(h.two_body["both"].values), "eightfold", n)
    np.testing.assert_array_equal(ao2mo.restore(1, theirs["H2"], n), full)
    fcidump.from_integrals(
        str(path), h.one_body["both"], full, n, 2, nuc=h.core_energy, tol=0.0, float_format=" %.17g"
    )
    found = converter.read(path, {}).wavefunction.hamiltonian
    assert found is not None
    assert_same(h, found)


def test_threshold(tmp_path: Path) -> None:
    values = np.array([0.5, 1e-9, -2e-10, 0.25, 0.0, 0.75])
    h = Hamiltonian(2, 0.0, {"both": np.diag([-1.0, 0.0])}, {"both": TwoBody(values)})
    path = tmp_path / "x.fcidump"
    writing = converter.write(wrap(h), path, {"threshold": "1e-8"})
    assert any("2 integrals of at most 1.0e-09 hartree left out" in note for note in writing.notes)
    found = converter.read(path, {}).wavefunction.hamiltonian
    assert found is not None
    assert np.asarray(found.two_body["both"].values).tolist() == [0.5, 0, 0, 0.25, 0, 0.75]
    for wrong in ("-1", "nan", "inf", "small"):
        with pytest.raises(ConversionError, match="threshold"):
            converter.write(wrap(h), path, {"threshold": wrong})


def test_symmetry_and_electrons(tmp_path: Path) -> None:
    for resolved in (False, True):
        h = hamiltonian(6, 2, resolved, False, 0.0, False)
        spins = {key: np.diag(np.diag(np.asarray(one))) for key, one in h.one_body.items()}
        two = {key: TwoBody(np.asarray(t.values) * allowed(key)) for key, t in h.two_body.items()}
        h = replace(h, one_body=spins, two_body=two, orbital_symmetry=np.array([0, 5], "i4"), state_symmetry=5)
        path = tmp_path / "x.fcidump"
        converter.write(wrap(h, 1, 2), path, {"threshold": "0"})
        wavefunction = converter.read(path, {}).wavefunction
        assert (wavefunction.system.n_up, wavefunction.system.n_down) == (1, 2)
        found = wavefunction.hamiltonian
        assert found is not None
        assert_same(h, found)
        assert np.asarray(found.orbital_symmetry).tolist() == [0, 5]
        assert found.state_symmetry == 5


def allowed(key: str) -> NDArray[np.float64]:
    """Of two orbitals of different irreps, which integrals are not zero: those with an even number of each."""
    if key == "up_down":
        return np.array([1, 0, 1, 0, 1, 0, 1, 0, 1.0])
    return np.array([1, 0, 1, 1, 0, 1.0])


def test_nothing_half_written(tmp_path: Path) -> None:
    h = hamiltonian(7, 2, False, False, 0.0, False)
    path = tmp_path / "x.fcidump"
    path.write_text("before")
    values = np.array(h.two_body["both"].values)
    values[-1] = np.nan
    with pytest.raises(ConversionError, match="2 2 2 2 is nan"):
        converter.write(wrap(replace(h, two_body={"both": TwoBody(values)})), path, {})
    with pytest.raises(UnsupportedError, match="no Hamiltonian"):
        converter.write(replace(wrap(h), hamiltonian=None), path, {})
    assert path.read_text() == "before"
    assert [p.name for p in tmp_path.iterdir()] == ["x.fcidump"]
    with pytest.raises(QwfxError, match="cannot be written"):
        converter.write(wrap(h), tmp_path / "nowhere" / "x.fcidump", {})
    with pytest.raises(QwfxError, match="cannot be read"):
        converter.read(tmp_path / "absent", {})
