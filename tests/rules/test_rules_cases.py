"""Both sides of each threshold, and the words of the findings that diagnose."""

from __future__ import annotations

from pathlib import Path

import pytest
from corpus.edits import build

from qwfx.findings import Finding, Outcome
from qwfx.validate import validate

NO_ENERGIES = "delete /energies"


def findings(rule: str, text: str, folder: Path, purpose: str = "auto") -> tuple[Finding, ...]:
    """Findings of one rule on one example; the rule must have run."""
    report = validate(build(text, folder / "a.qwfx"), rules=[rule], purpose=purpose)
    result = next(r for r in report.results if r.rule == rule)
    assert result.outcome in (Outcome.PASSED, Outcome.FOUND), result.reason
    return result.findings


def worst(rule: str, text: str, folder: Path, purpose: str = "auto") -> str:
    """Severity of the first finding, or ``none``."""
    found = findings(rule, text, folder, purpose)
    return found[0].severity.value if found else "none"


def place(z: str) -> str:
    return f"integrals_only\n/system/positions[2,2] = {z}\n{NO_ENERGIES}"


def three_body(gamma: str, channel: str) -> str:
    """A three-body cutoff polynomial of one row."""
    return (
        f'dressed\n/jastrow/inner@form = "cutoff-polynomial"\n/jastrow/inner@smoothness : int64 = 3\n'
        f"/jastrow/inner/channel = [{channel}]\n/jastrow/inner/cutoff : float64 = [4.0]\n"
        f"/jastrow/inner/coefficients = [{gamma}]\ndelete /jastrow/inner/scale\n"
        "delete /jastrow/inner/scale_electron\ndelete /jastrow/inner/powers"
    )


CORE = "".join(
    f"\n/potentials/{name} : {kind} = [{value}]"
    for name, kind, value in (
        ("center", "int32", 0), ("channel", "int32", -1), ("power", "int32", 0), ("exponent", "float64", 1),
        ("coefficient", "float64", 1),
    )
)  # fmt: skip


THRESHOLDS = [
    ("jastrow-parameters", "dressed\n/jastrow/nuclei@smoothness = 3", "none"),
    ("jastrow-parameters", "dressed\n/jastrow/nuclei@smoothness = 2", "note"),
    ("jastrow-parameters", "dressed\n/jastrow/nuclei@smoothness = 1", "warning"),
    ("coincident-nuclei", place("1.7008"), "error"),
    ("coincident-nuclei", place("1.7012"), "warning"),
    ("coincident-nuclei", place("2.29"), "warning"),
    ("coincident-nuclei", place("2.31"), "none"),
    ("coincident-nuclei", place("1.7") + "\n/system/effective_charges[2] = 0", "note"),
    ("coincident-nuclei", "crystal\n/system/positions[1,0] = 3.9995", "error"),
    ("coincident-nuclei", "crystal\n/system/positions[1,0] = 3.3", "none"),
    ("occupation-range", "hydrogen\n/orbitals/main/occupations = [2.0011, 0]", "warning"),
    ("occupation-range", "hydrogen\n/orbitals/main/occupations = [2.0009, 0]", "none"),
    ("occupation-range", "hydrogen\n/orbitals/main/occupations = [2, -0.0011]", "warning"),
    ("occupation-sum", "hydrogen\n/orbitals/main/occupations = [1.9989, 0]", "warning"),
    ("occupation-sum", "hydrogen\n/orbitals/main/occupations = [1.9991, 0]", "none"),
    ("occupation-sum", "hydrogen\n/orbitals/main/occupations = [0, 0]", "note"),
    ("expansion-norm", "hydrogen\n/expansion/coefficients = [[1.0000004]]", "none"),
    ("expansion-norm", "hydrogen\n/expansion/coefficients = [[1.0000006]]", "warning"),
    ("expansion-norm", "square\n/expansion/discarded_weight = [-0.01, 0.01]", "error"),
    ("string-occupations", "hydrogen\n/orbitals/main/occupations = [1.9989, 0.0011]", "warning"),
    ("string-occupations", "hydrogen\n/orbitals/main/occupations = [1.9991, 0.0009]", "none"),
    ("string-occupations", "square\n/orbitals/main/occupations : float64 = [1.9, 1.0, 0.9, 0.2]", "none"),
    ("hermitian-one-body", "lattice\n/hamiltonian/one_body/both = [[0, -1], [-1.0000009, 0]]", "warning"),
    ("hermitian-one-body", "lattice\n/hamiltonian/one_body/both = [[0, -1], [-1.0000011, 0]]", "error"),
    ("hermitian-one-body", "lattice\n/hamiltonian/one_body/both = [[0, -1], [-1.00000000009, 0]]", "none"),
    ("pair-symmetry", "ring\n/hamiltonian/one_body/both[0,1] = [9, 9]", "none"),
    ("coulomb-bounds", "lattice\n/hamiltonian/two_body/both/values = [-4, 4]", "warning"),
    ("coulomb-bounds", "lattice\n/hamiltonian/two_body/both/values = [4, 3.9]\n"
     "/hamiltonian/two_body/both/index = [0, 3]", "none"),
    ("coulomb-bounds", "lattice\n/hamiltonian/two_body/both/values = [4, 4.1, 4]\n"
     "/hamiltonian/two_body/both/index = [0, 3, 5]", "warning"),
    ("potential-pole", "carbon\n/potentials/coefficient[0] = 4.00001", "warning"),
    ("potential-pole", "carbon\n/potentials/coefficient[0] = 4.000003", "none"),
    ("nuclear-repulsion", "hydrogen\n/energies/value[1] = 0.7142848", "none"),
    ("nuclear-repulsion", "hydrogen\n/energies/value[1] = 0.714284", "error"),
    ("total-charge", "lattice\n/system@n_up = 1", "not-evaluated"),
    ("total-charge", "helium\n/system@n_up = 4", "none"),
    ("total-charge", "helium\n/system@n_up = 5", "warning"),
    ("total-charge", "helium\n/system/effective_charges[0] = 1.5", "warning"),
    ("atomic-numbers", "helium\n/system/atomic_numbers[0] = 119", "error"),
    ("atomic-numbers", "helium\n/system/atomic_numbers[0] = 118", "none"),
    ("atomic-numbers", "helium\n/system/effective_charges[0] = -1", "error"),
    ("atomic-numbers", "helium\n/system/atomic_numbers[0] = 0", "none"),
    ("core-charges", "helium\n/system/effective_charges[0] = 1", "error"),
    ("core-charges", "carbon\n/system/effective_charges[0] = 0", "error"),
    ("core-charges", "carbon\n/system/effective_charges[0] = 3", "warning"),
    ("core-charges", "carbon\n/system/effective_charges[0] = 4\ndelete /potentials", "error"),
    ("core-charges", "carbon\n/system/effective_charges[0] = 6\ndelete /potentials", "none"),
    ("angular-momenta", "hydrogen\n/basis/shell_l = [0, 7]", "note"),
    ("angular-momenta", "hydrogen\n/basis/shell_l = [0, -1]", "error"),
    ("angular-momenta", "hydrogen\n/basis/shell_l = [0, 6]", "none"),
    ("angular-momenta", "helium\n/basis/powers = [0, -1]", "error"),
    ("angular-momenta", "helium\n/basis/powers = [0, 41]", "error"),
    ("angular-momenta", "helium\n/basis/powers = [0, 40]", "none"),
    ("positive-exponents", "hydrogen\n/basis/exponents[0] = 0", "error"),
    ("positive-exponents", "hydrogen\n/basis/exponents[0] = 1e-9", "none"),
    ("potential-terms", "carbon\n/potentials/channel = [-1, -1, -2, 0]", "error"),
    ("potential-terms", "carbon\n/potentials/exponent[1] = 0", "error"),
    ("primitive-offsets", "hydrogen\n/basis/primitive_start = [0, 6, 6]", "error"),
    ("primitive-offsets", "hydrogen\n/basis/primitive_start = [0, 3, 5]", "error"),
    ("row-offsets", "square\n/expansion/row_start = [1, 2, 4, 6, 8]", "error"),
    ("row-offsets", "square\n/expansion/row_start = [0, 2, 4, 6, 7]", "error"),
    ("row-offsets", "square\n/expansion/row_start = [0, 4, 4, 6, 8]", "none"),
    ("unused-strings", "square\n/expansion/row_start = [0, 2, 2, 6, 8]\n"
     "/expansion/columns = [0, 3, 0, 1, 2, 3, 0, 3]", "warning"),
    ("column-order", "square\n/expansion/columns = [0, 3, 1, 2, 1, 2, 0, 4]", "error"),
    ("column-order", "square\n/expansion/columns = [-1, 3, 1, 2, 1, 2, 0, 3]", "error"),
    ("column-order", "square\n/expansion/columns = [0, 3, 2, 2, 1, 2, 0, 3]", "error"),
    ("string-order", "square\n/expansion/up_strings = [[3], [5], [5], [12]]", "error"),
    ("string-order", "square\n/expansion/up_strings : uint64 = [[5, 0], [3, 1], [4, 1], [1, 2]]\n"
     "/expansion/down_strings : uint64 = [[5, 0], [6, 0], [9, 0], [10, 0]]", "none"),
    ("string-order", "square\n/expansion/up_strings : uint64 = [[5, 0], [3, 2], [4, 1], [1, 2]]\n"
     "/expansion/down_strings : uint64 = [[5, 0], [6, 0], [9, 0], [10, 0]]", "error"),
    ("string-range", "square\n/expansion/up_strings : uint64 = [[3, 0], [5, 0], [10, 0], [12, 0]]\n"
     "/expansion/down_strings : uint64 = [[3, 0], [5, 0], [10, 0], [12, 0]]", "error"),
    ("sparse-index", "lattice\n/hamiltonian/two_body/both/index = [5, 0]", "error"),
    ("sparse-index", "lattice\n/hamiltonian/two_body/both/index = [5, 5]", "error"),
    ("symmetry-numbers", "hydrogen\n/hamiltonian@state_symmetry = 8", "error"),
    ("orbital-capacity", "hydrogen\n/system@n_up = 3", "note"),
    ("energies-table", "hydrogen\n/energies/state = [0, -1]", "error"),
    ("energies-table", "hydrogen\n/energies/value[0] = 1.1", "warning"),
    ("energies-table", 'hydrogen\n/energies/quantity = ["total", "total"]', "warning"),
    ("unknown-members", 'hydrogen\n/orbitals/main/colour : float64 = [1, 2]', "error"),
    ("unknown-members", 'hydrogen\n/@version = "1.3"\n/orbitals/main/colour : float64 = [1, 2]', "note"),
    ("unknown-members", 'hydrogen\n/system@colour = "red"', "error"),
    ("provenance-steps", 'hydrogen\n/provenance/steps = "{}"', "error"),
    ("provenance-steps", 'hydrogen\n/provenance/steps = "[{}]"', "error"),
    ("provenance-steps", 'hydrogen\n/provenance/steps = "[{\\"activity\\": \\"a\\", \\"agent\\": \\"b\\", '
     '\\"time\\": \\"2026-12-01 10:00\\"}]"', "error"),
    ("provenance-steps", 'hydrogen\n/provenance/steps = "[{\\"activity\\": \\"a\\", \\"agent\\": \\"b\\", '
     '\\"time\\": \\"2026-12-01T10:00:00Z\\"}]"', "none"),
    ("jastrow-channels", 'dressed\n/jastrow/pairs/channel = ["up_down", "up"]', "error"),
    ("jastrow-channels", 'dressed\n/jastrow/nuclei/channel = ["up", "up_down"]', "error"),
    ("jastrow-channels", "dressed", "note"),
    ("jastrow-channels", "dressed\ndelete /jastrow/pairs", "none"),
    ("jastrow-atoms", "dressed\n/jastrow/inner/atoms = [-1, 0]", "error"),
    ("jastrow-atoms", "dressed\n/jastrow/inner/atoms = [1, 0]", "error"),
    ("jastrow-atoms", "dressed\n/jastrow/inner/atoms = [1, 1]", "error"),
    ("jastrow-atoms", "dressed\n/jastrow/inner/atoms = [0, 1]", "none"),
    ("jastrow-parameters", "dressed\n/jastrow/nuclei/cutoff = [4, 0]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/splines/cutoff = [5, 5, -1]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/splines/coefficients = [[1, 2, 3], [1, 2, 3], [1, 2, 3]]", "none"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/scale = [1, 1, -1]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/scale_electron = [1, -1, 1]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/powers = [[1, 1, 2], [1, 2, 2]]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/powers = [[1, 1, 2], [0, 0, 0]]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/powers = [[1, 1, 2], [1, 1, 2]]", "error"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/powers = [[1, 1, 2], [1, 0, 0]]", "none"),
    ("jastrow-parameters", "dressed\n/jastrow/inner/powers = [[1, 1, 2], [2, 0, 3]]", "none"),
    ("length-unit", "integrals_only\n/system/atomic_numbers = [1, 1, 0]\n/system/positions = [[0, 0, 0], [0, 0, 0.75], "
     "[0, 0, 1.9]]\ndelete /energies", "warning"),
    ("length-unit", "integrals_only\n/system/positions = [[0, 0, 0], [0, 0, 0.75], [0, 0, 1.9]]\n"
     "delete /energies", "none"),
    ("length-unit", "integrals_only\n/system/atomic_numbers = [1, 8, 1]\n/system/effective_charges = [1, 8, 1]\n"
     "/system/positions = [[0, 0, 0], [0, 0, 3.4], [0, 3.4, 3.4]]\ndelete /energies", "warning"),
    ("length-unit", "integrals_only\n/system/atomic_numbers = [1, 1, 1]\n"
     "/system/positions = [[0, 0, 0], [0, 0, 2.4], [0, 2.4, 2.4]]\ndelete /energies", "none"),
    ("jastrow-channels", 'dressed\n/system@n_up = 0\n/system@n_down = 4\n'
     '/jastrow/pairs/channel = ["up_up", "down_down"]', "none"),
    ("jastrow-parameters", three_body("[[[1, 2], [3, 4]], [[5, 6], [7, 8]]]", '"up_down"'), "none"),
    ("jastrow-parameters", three_body("[[[1, 2], [3, 4]], [[5, 6], [7, 8]]]", '"up_up"'), "error"),
    ("jastrow-parameters", three_body("[[[1, 2], [3, 4]], [[3, 4], [7, 8]]]", '"up_up"'), "none"),
    ("density-orbitals", "hydrogen\n/hamiltonian@n_orbitals = 3\n/hamiltonian/one_body/both = "
     "[[1, 0, 0], [0, 1, 0], [0, 0, 1]]\n/hamiltonian/two_body/both/values = [1]\n"
     "/hamiltonian/two_body/both/index : uint64 = [0]\n/hamiltonian/orbital_symmetry = [0, 1, 2]\n"
     "delete /hamiltonian@up_set\ndelete /hamiltonian@down_set", "error"),
    ("density-orbitals", "hydrogen\ndelete /hamiltonian\ndelete /expansion", "none"),
    ("density-orbitals", "radical\ndelete /hamiltonian\n/densities/one_body/up : float64 = "
     "[[[1, 0, 0], [0, 1, 0], [0, 0, 0]]]", "none"),
    ("density-orbitals", "water\n/densities/one_body/both : float64 = [[[10]]]", "error"),
    ("witness-points", "hydrogen\n/witness/points = [[1, 0, 0], [2, 0, 0], [3, 0, 0], [1, 0, 0], [4, 0, 0], [5, 0, 0]]",
     "warning"),
    ("witness-points", "helium\n/witness/points[0,0] = 0\n/witness/points[0,1] = 0\n"
     "/witness/points[0,2] = 9e-7", "warning"),
    ("witness-points", "helium\n/witness/points[0,0] = 0\n/witness/points[0,1] = 0\n"
     "/witness/points[0,2] = 2e-6", "none"),
    ("string-roles", 'square\n/orbitals/main/roles = ["active", "active", "active", "virtual"]', "warning"),
    ("string-roles", 'radical\n/orbitals/up/roles : string = ["core", "core", "virtual"]', "none"),
    ("string-roles", 'radical\n/orbitals/down/roles : string = ["core", "core", "virtual"]', "warning"),
    ("witness-configurations", "watched\n/witness/configurations/potential[0,1] = 0.5", "error"),
    ("witness-configurations", "watched\n/witness/configurations/local_energy[1,2] = 0.5", "error"),
    ("witness-configurations", f"watched\n/witness/configurations/potential[0,1] = 0.5{CORE}\n"
     "delete /witness/configurations/local_energy", "none"),
    ("witness-configurations", "watched\n/witness/configurations/sign[1,2] = 0.5", "error"),
    ("witness-configurations", "watched\n/witness/configurations/gradients[0,0,3,2] = 7", "error"),
    ("cell-volume", "crystal\n/system/cell/vectors = [[0, 12, 0], [4, 0, 0], [0, 0, 12]]", "note"),
    ("kpoint-indices", "crystal\n/orbitals/main/kpoint = [0, -1]", "error"),
    ("kpoint-indices", "crystal\ndelete /system/cell", "error"),
    ("named-sets", 'hydrogen\n/expansion@up_set = "other"', "error"),
    ("named-sets", "hydrogen\n/hamiltonian@n_orbitals = 3\n"
     "/hamiltonian/one_body/both = [[1, 0, 0], [0, 1, 0], [0, 0, 1]]\n"
     "/hamiltonian/two_body/both/values = [1]\n/hamiltonian/two_body/both/index : uint64 = [0]\n"
     "/hamiltonian/orbital_symmetry = [0, 1, 2]", "error"),
    ("density-traces", "hydrogen\n/densities/one_body/both = [[[2.00009, 0], [0, 0]]]", "none"),
    ("density-traces", "hydrogen\n/densities/one_body/both = [[[2.00011, 0], [0, 0]]]", "warning"),
    ("density-traces", "hydrogen\n/densities/one_body/both = [[[2, 0.1], [0, 0]]]", "warning"),
    ("witness-presence", "hydrogen\n/witness@independent = 0", "note"),
    ("witness-sets", "radical\ndelete /witness/orbitals/up", "warning"),
    ("linear-dependence", "square\n/system/positions[1,0] = 0.0001", "note"),
    ("linear-dependence", "square\n/system/positions[1,0] = 0.01", "none"),
]  # fmt: skip


@pytest.mark.parametrize(("rule", "text", "expected"), THRESHOLDS)
def test_threshold(rule: str, text: str, expected: str, tmp_path: Path) -> None:
    if expected == "not-evaluated":
        report = validate(build(text, tmp_path / "a.qwfx"), rules=[rule])
        assert next(r for r in report.results if r.rule == rule).outcome is Outcome.NOT_EVALUATED
    else:
        assert worst(rule, text, tmp_path) == expected


@pytest.mark.parametrize(
    ("scale", "expected"), [("0.999998", "none"), ("0.99999", "warning"), ("0.9996", "warning"), ("0.999", "error")]
)
def test_orthonormality_thresholds(scale: str, expected: str, tmp_path: Path) -> None:
    """A factor f on one orbital gives a residual of 1 - f^2: 4e-6, 2e-5, 8e-4, 2e-3."""
    text = f"carbon\n/orbitals/main/coefficients[1,1] = {scale}"
    assert worst("orthonormality", text, tmp_path) == expected


@pytest.mark.parametrize(
    ("scale", "expected"), [(1 + 5e-9, "none"), (1 + 2e-8, "warning"), (1 + 9e-6, "warning"), (1 + 1.1e-5, "error")]
)
def test_witness_thresholds(scale: float, expected: str, tmp_path: Path) -> None:
    import h5py

    path = build("hydrogen", tmp_path / "a.qwfx")
    with h5py.File(path, "r+") as file:
        laplacians = file["/witness/orbitals/main/laplacians"][()]
        laplacians[:, 0] *= scale
        file["/witness/orbitals/main/laplacians"][...] = laplacians
    report = validate(path, rules=["witness-orbitals"])
    found = [f.severity.value for f in report.findings]
    assert (found or ["none"]) == [expected]


def test_reduced_charge_without_a_potential_is_an_error_for_a_trial_function_only(tmp_path: Path) -> None:
    text = "integrals_only\n/system/atomic_numbers[0] = 3\n" + NO_ENERGIES
    assert worst("core-charges", text, tmp_path, "hamiltonian") == "warning"


def test_full_charge_with_a_potential_names_the_charge_that_fits(tmp_path: Path) -> None:
    (finding,) = findings("core-charges", "carbon\n/system/effective_charges[0] = 6.0", tmp_path)
    assert "the local part belongs to charge 4" in finding.found


def test_count_and_first_index_of_grouped_places(tmp_path: Path) -> None:
    text = "square\n/expansion/up_strings = [[3], [1], [7], [12]]"
    (finding,) = findings("string-electrons", text, tmp_path)
    assert (finding.where, finding.count) == ("/expansion/up_strings[1]", 2)
    (finding,) = findings(
        "finite-numbers", "hydrogen\n/witness/points[2,1] = NaN\n/witness/points[4,0] = NaN", tmp_path
    )
    assert (finding.where, finding.count) == ("/witness/points[2,1]", 2)


@pytest.mark.parametrize(
    ("rule", "text", "where"),
    [
        ("primitive-offsets", "hydrogen\n/basis/primitive_start = [0, 6, 6]", "/basis/primitive_start[2]"),
        ("row-offsets", "square\n/expansion/row_start = [0, 2, 4, 3, 8]", "/expansion/row_start[3]"),
        ("column-order", "square\n/expansion/columns = [0, 3, 1, 2, 2, 1, 0, 3]", "/expansion/columns[5]"),
        ("string-order", "square\n/expansion/up_strings = [[3], [5], [12], [10]]", "/expansion/up_strings[3]"),
        ("sparse-index", "lattice\n/hamiltonian/two_body/both/index = [5, 5]", "/hamiltonian/two_body/both/index[1]"),
        ("jastrow-atoms", "dressed\n/jastrow/inner/atoms = [1, 0]", "/jastrow/inner/atoms[1]"),
        ("element-labels", 'water\n/system/labels[2] = "N2"', "/system/labels[2]"),
        ("atom-indices", "water\n/basis/shell_center[6] = 3", "/basis/shell_center[6]"),
        ("role-words", 'hydrogen\n/orbitals/main/roles[1] = "none"', "/orbitals/main/roles[1]"),
        (
            "coulomb-bounds",
            "hydrogen\n/hamiltonian/two_body/both/values[4] = 3",
            "/hamiltonian/two_body/both/values[4]",
        ),
        ("hermitian-one-body", "lattice\n/hamiltonian/one_body/both[1,0] = 1", "/hamiltonian/one_body/both[0,1]"),
        ("witness-orbitals", "radical\n/witness/orbitals/down/values[3,1] = 9", "/witness/orbitals/down/values[0,1]"),
    ],
)
def test_the_place_is_named_exactly(rule: str, text: str, where: str, tmp_path: Path) -> None:
    assert [f.where for f in findings(rule, text, tmp_path)] == [where]


def test_columns_that_fit_shells_of_the_other_kind_are_named(tmp_path: Path) -> None:
    text = "water\n/basis/shell_monomial[3] = 0"
    (finding,) = findings("function-count", text, tmp_path)
    assert finding.expected.startswith("18 columns")
    assert "19, the number if all shells were monomial" in finding.found


@pytest.mark.parametrize("rule", ["string-electrons", "string-order", "string-range", "row-offsets", "column-order",
                                  "unused-strings", "finite-numbers", "expansion-norm"])  # fmt: skip
@pytest.mark.parametrize(
    "change",
    ["", "/expansion/up_strings = [[3], [12], [7], [80]]", "/expansion/columns = [0, 3, 2, 1, 1, 5, 0, 3]",
     "/expansion/row_start = [0, 6, 4, 6, 8]"],
)  # fmt: skip
def test_small_blocks_give_the_same_findings(
    rule: str, change: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """What is read in many small pieces is judged as what is read at once."""
    path = build(f"square\n{change}", tmp_path / "a.qwfx")
    whole = validate(path, rules=[rule])
    monkeypatch.setattr("qwfx.rules.inspection.BLOCK_BYTES", 32)
    monkeypatch.setattr("qwfx.rules.consistency_expansion.ROWS_AT_A_TIME", 3)
    pieces = validate(path, rules=[rule])
    assert pieces.results == whole.results
