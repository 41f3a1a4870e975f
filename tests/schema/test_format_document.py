"""FORMAT.md: its made blocks are what the schema and a real file give, and its formulas hold."""

from __future__ import annotations

import itertools
import json
import math
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import jsonschema
import mpmath
import numpy as np
import pytest
from example_file import PADE_A, PADE_B, everything, pade, potential_energy
from format_blocks import FORMAT, item_digest, made, sha256, worked_digest

from qwfx.model import Wavefunction
from qwfx.schema_check import check_outline, jastrow_forms, load_schema
from qwfx.schema_check.layout import entries, layout
from qwfx.schema_check.tables import format_text, with_tables

TEXT = FORMAT.read_text("utf-8")
N_FORMULAS = 42


@pytest.fixture(scope="module")
def example() -> Wavefunction:
    return everything()


def test_the_packaged_text_is_this_one() -> None:
    assert format_text() == TEXT


def test_the_layout_tables_are_those_of_the_schema() -> None:
    assert with_tables(TEXT) == TEXT, "run `python -m qwfx.schema_check.tables`"


def test_the_example_dumps_are_those_of_a_real_file(tmp_path: Path) -> None:
    assert made(TEXT, tmp_path) == TEXT, "run `python tests/format_blocks.py`"


def test_the_example_is_valid_through_and_through(example: Wavefunction, tmp_path: Path) -> None:
    from qwfx.storage import outline, save
    from qwfx.validate import validate

    path = tmp_path / "example.qwfx"
    save(example, path)
    assert check_outline(outline(path)) == ()
    steps = json.loads(json.dumps([dict(step) for step in example.provenance.steps]))
    jsonschema.Draft202012Validator(load_schema("provenance")).validate(steps)
    report = validate(path, purpose="trial")
    assert [(f.where, f.found) for f in report.findings] == []
    assert report.exit_code == 0


def test_digests_of_a_real_file_by_the_letter_of_the_text(example: Wavefunction, tmp_path: Path) -> None:
    """F41 and F42, written down again without a look at storage, one block an item."""
    from qwfx.storage import open_raw, save

    path = tmp_path / "example.qwfx"
    save(example, path)
    spelling = {"float64": "<f8", "float32": "<f4", "int32": "<i4", "int64": "<i8", "int8": "|i1", "uint64": "<u8"}
    computed: dict[str, str] = {}

    def visit(raw: Any, node: dict[str, Any], name: str) -> None:
        if node["kind"] == "group":
            words = {k: a["value"] for k, a in node["attributes"].items()}
            if words and name:
                text = "{" + ",".join(f'"{k}":{json.dumps(words[k])}' for k in sorted(words)) + "}"
                computed[f"{name}@"] = item_digest(f"{name}@", "json", "", text.encode())[1]
            for below, member in node["members"].items():
                if f"{name}/{below}" != "/digests":
                    visit(raw, member, f"{name}/{below}")
            return
        array = np.asarray(raw.read(name))
        if node["dtype"] == "string":
            texts = [str(t).encode() for t in array.ravel()]
            width = max(len(t) for t in texts)
            kind, data = f"|S{width}", b"".join(t.ljust(width, b"\0") for t in texts)
        else:
            kind = spelling[node["dtype"]]
            data = array.astype(kind).tobytes()
        computed[name] = item_digest(name, kind, ",".join(map(str, node["shape"])), data)[1]

    with open_raw(path) as raw:
        visit(raw, raw.outline, "")
        told = dict(zip(map(str, raw.read("/digests/path")), (d.tobytes().hex() for d in raw.read("/digests/digest")),
                        strict=True))  # fmt: skip
        assert list(told) == sorted(told)
        assert computed == told
        physics = ("system", "potentials", "basis", "orbitals", "expansion", "jastrow", "hamiltonian", "densities",
                   "energies")  # fmt: skip
        lines = [f"{p} {d}\n" for p, d in told.items() if re.split(r"[/@]", p)[1] in physics]
        assert raw.attributes("/")["content_digest"] == sha256("".join(lines).encode()).hex()


def test_the_worked_digest_is_in_the_text() -> None:
    assert worked_digest() in TEXT


def test_every_group_has_a_table_and_an_example() -> None:
    groups = {e.path for e in entries(layout()) if e.kind == "group" and e.path.count("/") == 1}
    tables = set(re.findall(r"<!-- table: (\S+) -->", TEXT))
    assert groups | {f"jastrow/{form}" for form in jastrow_forms()} == tables
    assert groups - {"/"} == set(re.findall(r"<!-- example: (\S+) -->", TEXT))


def test_formulas_are_numbered_without_gaps_and_references_exist() -> None:
    numbers = [int(n) for n in re.findall(r"^\*\*F(\d+)\*\*", TEXT, re.MULTILINE)]
    assert numbers == list(range(1, N_FORMULAS + 1))
    documents = [TEXT, *(p.read_text("utf-8") for p in FORMAT.parent.rglob("*.schema.json"))]
    assert {int(n) for text in documents for n in re.findall(r"\bF(\d+)\b", text)} == set(numbers)


def test_section_links_and_sources() -> None:
    anchors = {
        re.sub(r"[^a-z0-9 -]", "", title.lower()).replace(" ", "-")
        for title in re.findall(r"^## (.*)$", TEXT, re.MULTILINE)
    }
    assert set(re.findall(r"\]\(#(.*?)\)", TEXT)) == anchors


# --- functions ---------------------------------------------------------------------------------------------------


def harmonic(l: int, m: int, x: float, y: float, z: float) -> float:
    """F3 to F5, word for word."""
    size, r = abs(m), math.sqrt(x * x + y * y + z * z)
    norm = (2 * l + 1) / (4 * math.pi) * (1 if m == 0 else 2) * math.factorial(l - size) / math.factorial(l + size)
    polar = sum(
        (-1) ** k * 2.0**-l * math.comb(l, k) * math.comb(2 * l - 2 * k, l)
        * math.factorial(l - 2 * k) / math.factorial(l - 2 * k - size) * r ** (2 * k) * z ** (l - 2 * k - size)
        for k in range((l - size) // 2 + 1)
    )  # fmt: skip
    power = complex(x, y) ** size
    return float(math.sqrt(norm) * polar * (power.real if m >= 0 else power.imag))


def table_rows() -> list[tuple[int, int, str, str]]:
    return [
        (int(l), int(m), n, p)
        for l, m, n, p in re.findall(r"^\| (\d) \| (-?\d) \| ([\d/]+) \| (.*?) \|$", TEXT, re.MULTILINE)
    ]


def polynomial(text: str, x: float, y: float, z: float) -> float:
    """A polynomial as the table writes it: powers with ^, products by juxtaposition."""
    code = text.replace("^", "**")
    code = re.sub(r"(?<=[\dxyz)]) (?=[xyz(])", " * ", code)
    return float(eval(code, {"__builtins__": {}}, {"x": x, "y": y, "z": z}))


def test_the_table_of_harmonics_is_the_general_formula() -> None:
    rows = table_rows()
    assert [(l, m) for l, m, _, _ in rows] == [(l, m) for l in range(5) for m in range(-l, l + 1)]
    for l, m, n, p in rows:
        up, _, down = n.partition("/")
        for point in np.random.default_rng(5).normal(size=(5, 3)):
            tabulated = math.sqrt(int(up) / int(down or 1) / math.pi) * polynomial(p, *point)
            assert tabulated == pytest.approx(harmonic(l, m, *point), rel=1e-12, abs=1e-13), (l, m)


def test_the_general_formula_is_that_of_scipy() -> None:
    """SciPy's complex Y_lm has the Condon-Shortley phase; without it its real and imaginary parts are F3."""
    from scipy.special import lpmv

    for l in range(7):
        for m in range(-l, l + 1):
            for point in np.random.default_rng(l).normal(size=(3, 3)):
                r = float(np.linalg.norm(point))
                phi = math.atan2(point[1], point[0])
                size = abs(m)
                norm = math.sqrt(
                    (2 * l + 1) / (4 * math.pi) * math.factorial(l - size) / math.factorial(l + size)
                ) * (1 if m == 0 else math.sqrt(2))
                angular = (-1) ** size * lpmv(size, l, point[2] / r)
                wave = math.cos(size * phi) if m >= 0 else math.sin(size * phi)
                assert harmonic(l, m, *point) == pytest.approx(norm * r**l * angular * wave, rel=1e-11, abs=1e-12)


def test_the_reference_implementation_follows_the_text() -> None:
    from qwfx.reference.harmonics import monomial_powers, solid_from_monomial

    point = np.array([0.4, -0.7, 1.1])
    for l in range(7):
        monomials = np.array([np.prod(point ** np.array(powers)) for powers in monomial_powers(l)])
        ours = solid_from_monomial(l) @ monomials
        assert ours == pytest.approx([harmonic(l, m, *point) for m in range(-l, l + 1)], rel=1e-11, abs=1e-13)


@pytest.mark.parametrize("text", ["x*y", "x**2", "z**3", "x**2*y"])
def test_gradient_and_laplacian_of_a_function(text: str) -> None:
    """F7 and F8 against numerical derivatives at 40 digits, with R a Gaussian times a power."""
    mpmath.mp.dps = 40
    code = compile(text, "polynomial", "eval")

    def p(*v: Any) -> Any:
        return eval(code, {"__builtins__": {}}, dict(zip("xyz", v, strict=True)))

    def radial(r: Any) -> Any:
        return mpmath.mpf("0.8") * r * mpmath.exp(mpmath.mpf("-0.6") * r * r)

    l = {"x*y": 2, "x**2": 2, "z**3": 3, "x**2*y": 3}[text]
    at = tuple(mpmath.mpf(v) for v in ("0.3", "-0.8", "0.5"))
    r = mpmath.sqrt(sum(v * v for v in at))
    chi: Callable[..., Any] = lambda *v: radial(mpmath.sqrt(sum(c * c for c in v))) * p(*v)  # noqa: E731
    first = [tuple(int(i == k) for i in range(3)) for k in range(3)]
    second = [tuple(2 * i for i in order) for order in first]
    gradient = [mpmath.diff(chi, at, order) for order in first]
    slope, curvature = mpmath.diff(radial, r), mpmath.diff(radial, r, 2)
    formula = [slope / r * at[k] * p(*at) + radial(r) * mpmath.diff(p, at, first[k]) for k in range(3)]
    assert max(abs(a - b) for a, b in zip(gradient, formula, strict=True)) < 1e-12
    laplacian = sum(mpmath.diff(chi, at, order) for order in second)
    own = sum(mpmath.diff(p, at, order) for order in second)
    assert abs(laplacian - ((curvature + 2 * (l + 1) * slope / r) * p(*at) + radial(r) * own)) < 1e-12
    mpmath.mp.dps = 15


# --- Jastrow forms -----------------------------------------------------------------------------------------------


def test_pade() -> None:
    for r in (0.3, 2.0):
        for order, formula in enumerate(pade(np.array(r))):
            assert formula == pytest.approx(float(mpmath.diff(lambda x: PADE_A * x / (1 + PADE_B * x), r, order)))


def test_cutoff_polynomial_slope() -> None:
    """F21: the slope at 0, and the alpha_1 that gives a wanted slope."""
    for smoothness, cutoff, alpha_0, slope in ((3, 4.0, 0.02, 0.5), (2, 3.0, -0.1, 0.25)):
        alpha_1 = slope / (-cutoff) ** smoothness + alpha_0 * smoothness / cutoff

        def u(r: Any, c: int = smoothness, length: float = cutoff, a: float = alpha_0, b: float = alpha_1) -> Any:
            return (r - length) ** c * (a + b * r)

        assert float(mpmath.diff(u, 0)) == pytest.approx(slope, rel=1e-12)


def test_cutoff_polynomial_three_body_cusps() -> None:
    """F22: the two conditions on gamma, by constructing a gamma that satisfies each."""
    rng = np.random.default_rng(8)
    c, length, n = 3, 4.0, 3

    def f(gamma: Any, ri: Any, rj: Any, rij: Any) -> Any:
        total = sum(gamma[k] * ri ** k[0] * rj ** k[1] * rij ** k[2] for k in np.ndindex(n, n, n))
        return (ri - length) ** c * (rj - length) ** c * total

    gamma = rng.normal(size=(n, n, n))
    gamma = gamma + gamma.transpose(1, 0, 2)
    electron = gamma.copy()
    for k in range(2 * n - 1):  # sum over l + m = k of gamma_lm1 = 0
        pairs = [(a, k - a) for a in range(n) if 0 <= k - a < n]
        mean = sum(electron[a, b, 1] for a, b in pairs) / len(pairs)
        for a, b in pairs:
            electron[a, b, 1] -= mean
    for r in (0.5, 1.7):
        assert abs(float(mpmath.diff(lambda x, r=r: f(electron, r, r, x), 0))) < 1e-9
        assert abs(float(mpmath.diff(lambda x, r=r: f(gamma, r, r, x), 0))) > 1e-3
    nuclear = gamma.copy()
    for k in range(2 * n - 1):  # sum over m + n = k of C gamma_0mn - L gamma_1mn = 0, mended through gamma_1mn
        pairs = [(a, k - a) for a in range(n) if 0 <= k - a < n]
        excess = sum(c * nuclear[0, a, b] - length * nuclear[1, a, b] for a, b in pairs)
        nuclear[1, pairs[-1][0], pairs[-1][1]] += excess / length
    for r in (0.5, 1.7):  # r_i -> 0 with r_j = r_ij = r
        assert abs(float(mpmath.diff(lambda x, r=r: f(nuclear, x, r, r), 0))) < 1e-8
        assert abs(float(mpmath.diff(lambda x, r=r: f(gamma, x, r, r), 0))) > 1e-3


def test_spline_ends() -> None:
    """F25, F26: values at 0 and at L, and two continuous derivatives at every knot."""
    c, length = np.array([0.3, -0.2, 0.5, 0.1, 0.7]), 3.0
    h = length / len(c)

    def basis_spline(t: Any) -> Any:
        t = abs(t)
        if t <= 1:
            return mpmath.mpf(2) / 3 - t**2 + t**3 / 2
        return (2 - t) ** 3 / 6 if t <= 2 else mpmath.mpf(0)

    def u(r: Any) -> Any:
        return sum(float(a) * basis_spline(r / h - k + 1) for k, a in enumerate(c))

    def one_sided(r: float, order: int, side: int) -> float:
        return float(mpmath.diff(u, r, order, direction=side, h=mpmath.mpf("1e-6")))

    assert float(u(0)) == pytest.approx((c[0] + 4 * c[1] + c[2]) / 6)
    assert one_sided(0, 1, 1) == pytest.approx((c[2] - c[0]) / (2 * h), abs=1e-5)
    for order in range(3):
        assert one_sided(length, order, -1) == pytest.approx(0, abs=2e-5)
    for k in range(1, len(c)):
        for order in range(3):
            assert one_sided(k * h, order, -1) == pytest.approx(one_sided(k * h, order, 1), abs=1e-4)


def test_three_body_derivatives() -> None:
    """F27 against numerical derivatives, with a function that has no symmetry."""
    mpmath.mp.dps = 30

    def f(a: Any, b: Any, c: Any) -> Any:
        return a**2 * b * c + mpmath.exp(-a * c) + b * b * c**2

    ri, rj = [mpmath.mpf(v) for v in ("0.3", "0.5", "-0.7")], [mpmath.mpf(v) for v in ("-0.6", "0.2", "0.4")]

    def size(v: Any) -> Any:
        return mpmath.sqrt(sum(c * c for c in v))

    def whole(*v: Any) -> Any:
        i, j = v[:3], v[3:]
        return f(size(i), size(j), size([a - b for a, b in zip(i, j, strict=True)]))

    apart = [a - b for a, b in zip(ri, rj, strict=True)]
    args = (size(ri), size(rj), size(apart))
    d = {o: mpmath.diff(f, args, o) for o in itertools.product(range(3), repeat=3) if 1 <= sum(o) <= 2}
    e_i, e_j = [v / args[0] for v in ri], [v / args[1] for v in rj]
    e_ij = [v / args[2] for v in apart]

    def dot(a: Any, b: Any) -> Any:
        return sum(x * y for x, y in zip(a, b, strict=True))

    grad_i = [d[1, 0, 0] * a + d[0, 0, 1] * b for a, b in zip(e_i, e_ij, strict=True)]
    grad_j = [d[0, 1, 0] * a - d[0, 0, 1] * b for a, b in zip(e_j, e_ij, strict=True)]
    lap_i = (d[2, 0, 0] + 2 * d[1, 0, 0] / args[0] + d[0, 0, 2] + 2 * d[0, 0, 1] / args[2]
             + 2 * d[1, 0, 1] * dot(e_i, e_ij))  # fmt: skip
    lap_j = (d[0, 2, 0] + 2 * d[0, 1, 0] / args[1] + d[0, 0, 2] + 2 * d[0, 0, 1] / args[2]
             - 2 * d[0, 1, 1] * dot(e_j, e_ij))  # fmt: skip
    point = (*ri, *rj)
    unit = [tuple(int(i == k) for i in range(6)) for k in range(6)]
    numerical = [mpmath.diff(whole, point, u) for u in unit]
    assert max(abs(a - b) for a, b in zip(numerical, [*grad_i, *grad_j], strict=True)) < 1e-8
    twice = [mpmath.diff(whole, point, tuple(2 * i for i in u)) for u in unit]
    assert abs(sum(twice[:3]) - lap_i) < 1e-8
    assert abs(sum(twice[3:]) - lap_j) < 1e-8
    mpmath.mp.dps = 15


# --- the example ---------------------------------------------------------------------------------------------------


def test_the_example_is_what_the_formulas_say(example: Wavefunction) -> None:
    """F10, F12 and F17 with the reference evaluator give the witness that PySCF and NumPy made."""
    from qwfx.reference import evaluate_orbitals

    assert example.basis is not None
    assert example.expansion is not None
    assert example.witness is not None
    assert example.witness.configurations is not None
    orbitals = example.orbitals["spatial"]
    told, configurations = example.witness.orbitals["spatial"], example.witness.configurations

    basis = example.basis

    def at(points: Any) -> Any:
        return evaluate_orbitals(basis, example.system.positions, orbitals.coefficients, points)

    value, dx, dy, dz, laplacian = at(example.witness.points)
    assert value == pytest.approx(told.values, abs=1e-13)
    assert np.stack([dx, dy, dz], -1) == pytest.approx(told.gradients, abs=1e-12)
    assert laplacian == pytest.approx(told.laplacians, abs=1e-12)
    phi = at(configurations.positions.reshape(-1, 3))[0].reshape(3, 2, 2)
    c = np.asarray(example.expansion.coefficients)[0]
    d = c[0] * phi[:, 0, 0] * phi[:, 1, 0] + c[1] * phi[:, 0, 1] * phi[:, 1, 1]
    assert configurations.sign[0] * np.exp(configurations.log_abs[0]) == pytest.approx(d, rel=1e-12)


def test_the_local_energy_of_the_example(example: Wavefunction) -> None:
    """(H Psi)/Psi of F29 by numerical differentiation of Psi = D exp(J) itself."""
    from qwfx.reference import evaluate_orbitals

    assert example.basis is not None
    assert example.expansion is not None
    assert example.witness is not None
    told = example.witness.configurations
    assert told is not None
    assert told.local_energy is not None
    basis, c = example.basis, np.asarray(example.expansion.coefficients)[0]

    def psi(flat: Any) -> Any:
        points = flat.reshape(-1, 3)
        phi = evaluate_orbitals(basis, example.system.positions, example.orbitals["spatial"].coefficients,
                                points, derivatives=0)[0].reshape(-1, 2, 2)  # fmt: skip
        both = points.reshape(-1, 2, 3)
        r = np.linalg.norm(both[:, 0] - both[:, 1], axis=-1)
        return (phi[:, 0] * phi[:, 1]) @ c * np.exp(pade(r)[0])

    step = 4e-3
    weights = {-2: -1 / 12, -1: 4 / 3, 0: -5 / 2, 1: 4 / 3, 2: -1 / 12}  # fourth-order second derivative
    for k, configuration in enumerate(told.positions):
        laplacian = 0.0
        for axis in range(6):
            for shift, weight in weights.items():
                moved = configuration.reshape(6).copy()
                moved[axis] += shift * step
                laplacian += weight * psi(moved)[0] / step**2
        energy = -0.5 * laplacian / psi(configuration.reshape(6))[0] + potential_energy(configuration)
        assert energy == pytest.approx(told.local_energy[0, k], rel=1e-6)


def test_density_matrices_of_the_example_give_its_energy(example: Wavefunction) -> None:
    """F30 to F32 with F37 and F38."""
    assert example.hamiltonian is not None
    assert example.densities is not None
    assert example.energies is not None
    packed = np.asarray(example.hamiltonian.two_body["both"].values)
    integrals = np.zeros((2, 2, 2, 2))
    for p, q, r, s in np.ndindex(2, 2, 2, 2):
        pq, rs = (max(a, b) * (max(a, b) + 1) // 2 + min(a, b) for a, b in ((p, q), (r, s)))
        integrals[p, q, r, s] = packed[max(pq, rs) * (max(pq, rs) + 1) // 2 + min(pq, rs)]
    energy = (
        example.hamiltonian.core_energy
        + np.sum(np.asarray(example.hamiltonian.one_body["both"]) * np.asarray(example.densities.one_body["both"])[0])
        + 0.5 * np.sum(integrals * np.asarray(example.densities.two_body["both"])[0])
    )
    assert energy == pytest.approx(example.energies.value[0], abs=1e-12)


def test_the_energy_of_the_example_is_that_of_full_ci(example: Wavefunction) -> None:
    from pyscf import fci

    assert example.hamiltonian is not None
    assert example.energies is not None
    one = np.asarray(example.hamiltonian.one_body["both"])
    two = np.asarray(example.hamiltonian.two_body["both"].values)  # eightfold, PySCF's order too
    energy, _ = fci.direct_spin1.kernel(one, two, 2, 2, ecore=example.hamiltonian.core_energy)
    assert energy == pytest.approx(example.energies.value[0], abs=1e-10)
