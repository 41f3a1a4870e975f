"""`check_outline`: the examples, any JSON Schema implementation on the same documents, mutations, messages."""

from __future__ import annotations

import copy
import json
import time
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from schema_outlines import EXAMPLES, attribute, data, defects, everything, group, minimal, restricted
from schema_outlines import VALID as MADE

from qwfx.schema_check import SchemaProblem, check_outline, load_schema
from qwfx.schema_check.dims import Ledger, parse

FILES = sorted(EXAMPLES.glob("*.json"))


def load(path: Path) -> dict[str, Any]:
    document: dict[str, Any] = json.loads(path.read_text("utf-8"))
    return document


def plain_accepts(outline: dict[str, Any]) -> bool:
    """What FORMAT.md asks of any implementation: the outline's schema, then that of the form of each term."""
    if not jsonschema.Draft202012Validator(load_schema("qwfx-1.0")).is_valid(outline):
        return False
    terms = outline["members"].get("jastrow", {"members": {}})["members"].values()
    for term in terms:
        form = term["attributes"]["form"]["value"]
        path = EXAMPLES.parent / "jastrow" / f"{form}.schema.json"
        if path.exists() and not jsonschema.Draft202012Validator(load(path)).is_valid(term):
            return False
    return True


def test_the_examples_are_those_that_the_code_makes() -> None:
    made = {f"valid-{name}.json": make() for name, (_, make) in MADE.items()}
    made |= {f"defective-{name}.json": outline for name, (_, _, _, outline) in defects().items()}
    assert {path.name: load(path)["outline"] for path in FILES} == made


@pytest.mark.parametrize("path", FILES, ids=[p.stem for p in FILES])
def test_example(path: Path) -> None:
    example = load(path)
    problems = check_outline(example["outline"])
    assert [{"path": p.path, "keyword": p.keyword} for p in problems] == example["problems"]
    for problem in problems:
        assert problem.expected
        assert problem.found
        assert problem.remedy
        for jargon in ("is not of type", "is a required property", "additionalProperties", "$ref", "schema allow"):
            assert jargon not in str(problem)


@pytest.mark.parametrize("path", FILES, ids=[p.stem for p in FILES])
def test_any_implementation_gives_the_same_answer_but_for_dims(path: Path) -> None:
    example = load(path)
    assert plain_accepts(example["outline"]) == (example["plain_json_schema"] == "accepts")


def test_messages_name_the_remedy() -> None:
    said = {name: [str(p) for p in check_outline(outline)] for name, (_, _, _, outline) in defects().items()}
    assert "rename it to `exponents`" in said["misspelt-member"][1]
    assert "perhaps `exponent` is meant" in said["misspelt-member"][0]
    assert "perhaps `gaussian` is meant" in said["misspelt-word"][0]
    assert "perhaps `pade` is meant" in said["unknown-form"][0]
    assert "float64, as `packing` is `real`" in said["complex-for-real"][0]
    assert "231 = pairs(pairs(hamiltonian_orbital)), with 6 orbitals" in said["short-integrals"][0]
    assert "axis 0 of /orbitals/spatial/coefficients" in said["transposed-orbitals"][0]
    assert "a newer qwfx checks it" in said["newer-minor"][0]


def datasets(node: dict[str, Any], path: str = "") -> list[tuple[str, dict[str, Any]]]:
    found = [(path, node)] if node["kind"] == "dataset" else []
    for name, below in node.get("members", {}).items():
        found += datasets(below, f"{path}/{name}")
    return found


# Dimensions that one dataset alone has: a change there is a different, sound file.
ALONE = {
    ("everything", "/system/cell/kpoints", 0), ("everything", "/basis/shell_center", -1),
    ("everything", "/expansion/up_strings", -1), ("everything", "/expansion/down_strings", 0),
    ("everything", "/jastrow/nuclei/atoms", 0), ("everything", "/jastrow/triples/atoms", 0),
    ("everything", "/jastrow/scaled/atoms", 0), ("everything", "/jastrow/nuclei/coefficients", 1),
    ("everything", "/jastrow/triples/coefficients", 3),
    ("everything", "/digests/block_digest", 0),
    ("restricted", "/digests/block_digest", 0), ("restricted", "/orbitals/spatial/coefficients", 1),
}  # fmt: skip
AXES = [
    (name, path, axis)
    for name, make in (("everything", everything), ("restricted", restricted))
    for path, node in datasets(make())
    if not path.startswith("/extensions")
    for axis in range(len(node["shape"]))
    if (name, path, axis) not in ALONE
]


@settings(max_examples=150, deadline=None)
@given(st.sampled_from(AXES), st.integers(1, 50))
def test_an_extent_that_grows_is_caught(where: tuple[str, str, int], by: int) -> None:
    name, path, axis = where
    outline = {"everything": everything, "restricted": restricted}[name]()
    node = dict(datasets(outline))[path]
    node["shape"][axis] += by
    problems = check_outline(outline)
    assert problems, where
    assert {p.keyword for p in problems} <= {"dims", "shape"}
    if len(problems) == 1:  # the odd one out is the first occurrence or is named as it
        assert path in str(problems[0])


@settings(max_examples=100, deadline=None)
@given(st.sampled_from([(n, p) for n, p, axis in AXES if axis == 0]), st.booleans())
def test_a_wrong_rank_is_caught(where: tuple[str, str], more: bool) -> None:
    name, path = where
    outline = {"everything": everything, "restricted": restricted}[name]()
    node = dict(datasets(outline))[path]
    node["shape"] = [*node["shape"], 2] if more else node["shape"][1:]
    assert (path, "shape") in [(p.path, p.keyword) for p in check_outline(outline)]


@settings(max_examples=100, deadline=None)
@given(
    st.sampled_from(sorted({(n, p) for n, p, _ in AXES})), st.sampled_from(["float32", "string", "int16", "float64"])
)
def test_a_wrong_type_is_caught(where: tuple[str, str], dtype: str) -> None:
    name, path = where
    outline = {"everything": everything, "restricted": restricted}[name]()
    node = dict(datasets(outline))[path]
    before = node["dtype"]
    node["dtype"] = dtype
    integers = before.startswith("int") or path.endswith("index")
    numbers = before == "complex128"
    sound = dtype == before or (integers and dtype == "int16") or (numbers and dtype == "float64")
    assert bool(check_outline(outline)) is not sound


@pytest.mark.parametrize("name", ["everything", "restricted"])
def test_each_required_member_is_missed(name: str) -> None:
    whole = {"everything": everything, "restricted": restricted}[name]()
    optional = ("energies", "occupations", "roles", "irreps", "kpoint", "powers", "discarded_weight", "cell",
                "orbital_symmetry", "potential", "local_energy")  # fmt: skip
    for path, _ in datasets(whole):
        if path.startswith("/extensions"):
            continue
        outline = copy.deepcopy(whole)
        parent, _, last = path.rpartition("/")
        node = outline
        for step in parent.strip("/").split("/"):
            node = node["members"][step]
        del node["members"][last]
        problems = check_outline(outline)
        free = last in optional or path.startswith(("/densities/", "/hamiltonian/orbital_energies/"))
        if path.endswith("down_down/index"):
            assert [p.keyword for p in problems] == ["dims"]  # dense now, and too short for that
        elif not free:
            assert path in [p.path for p in problems] or parent in [p.path for p in problems], path


def test_dense_lengths_of_every_packing() -> None:
    """The four packed lengths by counting, n = 3."""
    n = 3
    pair = [(p, q) for p in range(n) for q in range(p + 1)]
    full = [(p, q) for p in range(n) for q in range(n)]

    def triangle(items: list[tuple[int, int]]) -> int:
        return sum(1 for i in range(len(items)) for j in range(i + 1))

    lengths = {
        ("real", "both"): triangle(pair), ("real", "up_down"): len(pair) ** 2,
        ("complex", "both"): triangle(full), ("complex", "up_down"): len(full) ** 2,
    }  # fmt: skip
    for (packing, key), right in lengths.items():
        for length in (right - 1, right, right + 1):
            spin = key == "up_down"
            like = lengths[packing, "both"]
            dense = {k: group(values=data("float64", length if k == "up_down" else like))
                     for k in ("up_up", "up_down", "down_down")}  # fmt: skip
            outline = minimal()
            outline["members"]["hamiltonian"] = group(
                {"n_orbitals": n, "packing": packing},
                core_energy=data("float64"),
                one_body=group(**{k: data("float64", n, n) for k in (("up", "down") if spin else ("both",))}),
                two_body=group(**dense) if spin else group(both=group(values=data("float64", length))),
            )
            assert bool(check_outline(outline)) is (length != right), (packing, key, length)


def test_a_float_attribute_and_an_array_attribute_are_refused() -> None:
    outline = minimal()
    outline["members"]["system"]["attributes"]["n_up"] = {"dtype": "float64", "shape": [], "value": 1.0}
    outline["members"]["system"]["attributes"]["n_down"] = {"dtype": "int64", "shape": [1], "value": [0]}
    assert {(p.path, p.keyword) for p in check_outline(outline)} >= {
        ("/system@n_up", "dtype"), ("/system@n_down", "shape"),
    }  # fmt: skip


def test_unknown_names_are_counted_and_not_listed_without_end() -> None:
    outline = minimal()
    outline["members"] |= {f"stray{i}": data("float64") for i in range(500)}
    problems = check_outline(outline)
    assert len(problems) == 21
    assert "480 more unknown members" in problems[-1].found


def test_names_of_sets_and_terms() -> None:
    outline = restricted()
    sets = outline["members"]["orbitals"]["members"]
    sets["a b"] = sets.pop("spatial")
    assert ("/orbitals/a b", "propertyNames") in [(p.path, p.keyword) for p in check_outline(outline)]


def test_extensions_are_free() -> None:
    outline = minimal()
    outline["members"]["extensions"] = group(
        ours=group({"x": 1}, deep=group({"y": "z"}, anything=data("float32", 3, 1)), n=data("int16"))
    )
    assert check_outline(outline) == ()
    outline["members"]["extensions"]["members"]["loose"] = data("float64", 3)
    assert [p.keyword for p in check_outline(outline)] == ["kind"]


@pytest.mark.parametrize("outline", [{}, {"kind": "group"}, {"kind": "dataset", "dtype": "float64", "shape": []},
                                     {"kind": "group", "attributes": [], "members": {"jastrow": 3}}])  # fmt: skip
def test_what_is_no_outline_gives_problems_and_no_traceback(outline: dict[str, Any]) -> None:
    problems = check_outline(outline)
    assert problems
    assert all(isinstance(p, SchemaProblem) for p in problems)


JUNK = st.recursive(
    st.none() | st.booleans() | st.integers() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(
        st.sampled_from(["kind", "members", "attributes", "shape", "dtype", "value", "form", "a"]), inner, max_size=4),
    max_leaves=12,
)  # fmt: skip


@settings(max_examples=80, deadline=None)
@given(st.sampled_from([p for _, p, _ in AXES]), JUNK)
def test_junk_anywhere_gives_problems_and_no_traceback(path: str, junk: Any) -> None:
    outline = everything()
    node, (*parents, last) = outline, path.strip("/").split("/")
    for step in parents:
        node = node["members"].get(step, {"members": {}})
    node["members"][last] = junk
    assert isinstance(check_outline(outline), tuple)


def test_the_check_is_quick() -> None:
    """Bounded work, not a benchmark: a file of every group takes some 20 ms."""
    outline = everything()
    check_outline(outline)
    start = time.process_time()
    check_outline(outline)
    assert time.process_time() - start < 0.5


def test_expressions() -> None:
    known = {"a": 3, "b:x": 4}
    assert parse("a+1").value(known) == 4
    assert parse("a*a+b:{set}").filled({"set": "x"}).value(known) == 13
    assert parse("pairs(pairs(a))").value(known) == 21
    assert parse(7).value({}) == 7
    assert parse("a+unknown").value(known) is None
    assert parse("unknown+1").solved(9, known) == ("unknown", 8)
    assert parse("unknown+1").solved(0, known) is None
    assert parse("unknown*2").solved(8, known) is None
    for wrong in ("", "a+", "pairs(a", "a b", "A", "a-1", "+a"):
        with pytest.raises(ValueError, match="not an expression"):
            parse(wrong)


def test_a_ledger_binds_plain_names_before_sums() -> None:
    ledger = Ledger({"shell": "shells"})
    ledger.shape("/start", [9], ["shell+1"], {})
    ledger.shape("/center", [7], ["shell"], {})
    assert [(p.path, p.found) for p in ledger.problems()] == [("/start", "extent of axis 0 9")]


def test_attribute_helper_is_what_storage_writes() -> None:
    assert attribute("x") == {"dtype": "string", "shape": [], "value": "x"}
