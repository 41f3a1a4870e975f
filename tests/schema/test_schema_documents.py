"""The schemas as documents: sound JSON Schema, sound vocabulary, and in step with the model."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from qwfx import model
from qwfx.errors import FileError
from qwfx.schema_check import jastrow_forms, load_schema
from qwfx.schema_check.dims import parse
from qwfx.schema_check.layout import Entry, entries, find, layout

SCHEMA = Path(__file__).parents[2] / "schema"
OUTLINE_SCHEMAS = ["qwfx-1.0", *(f"jastrow/{form}" for form in jastrow_forms())]
ALL = [*OUTLINE_SCHEMAS, "report", "provenance"]
VOCABULARY_ONLY_HERE = {"dims", "counts", "binds", "dimensions", "units", "written_as", "expects"}


def test_the_named_documents_are_all_that_the_folder_holds() -> None:
    on_disk = {p.relative_to(SCHEMA).as_posix() for p in SCHEMA.rglob("*.json") if p.parent.name != "examples"}
    assert on_disk == {f"{name}.schema.json" for name in ALL} | {"shapes.vocabulary.json"}


@pytest.mark.parametrize("name", ALL)
def test_every_schema_is_valid_against_the_2020_12_metaschema(name: str) -> None:
    document = load_schema(name)
    assert document["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    jsonschema.Draft202012Validator.check_schema(document)


def subschemas(node: Any) -> list[dict[str, Any]]:
    """Every object of a schema document that stands where a schema may stand."""
    found: list[dict[str, Any]] = []
    if isinstance(node, dict):
        found.append(node)
        for keyword, value in node.items():
            if keyword in ("properties", "$defs", "dependentSchemas", "patternProperties"):
                for below in value.values():
                    found += subschemas(below)
            elif keyword in ("allOf", "oneOf", "anyOf", "prefixItems"):
                for below in value:
                    found += subschemas(below)
            elif keyword in ("if", "then", "else", "not", "items", "additionalProperties", "propertyNames"):
                found += subschemas(value)
    return found


@pytest.mark.parametrize("name", OUTLINE_SCHEMAS)
def test_the_vocabulary_is_used_as_its_metaschema_says(name: str) -> None:
    vocabulary = load_schema("shapes")
    checker = jsonschema.Draft202012Validator({k: v for k, v in vocabulary.items() if k != "allOf"})
    document = load_schema(name)
    known = {*document["dimensions"], *load_schema("qwfx-1.0")["dimensions"]}
    used = set()
    for schema in subschemas(document):
        assert not list(checker.iter_errors(schema)), schema
        for text in schema.get("dims", ()):
            used |= {n.partition(":")[0] for n in parse(text).names()}
        used |= {schema["counts"]} if "counts" in schema else set()
    assert used <= known
    assert set(document["dimensions"]) <= used, "a dimension that nothing has"


def test_the_vocabulary_metaschema_refuses_what_is_not_an_expression() -> None:
    checker = jsonschema.Draft202012Validator({k: v for k, v in load_schema("shapes").items() if k != "allOf"})
    assert list(checker.iter_errors({"dims": ["Shell"]}))
    assert list(checker.iter_errors({"dims": [-1]}))
    assert list(checker.iter_errors({"counts": "pairs"}))
    assert not list(checker.iter_errors({"dims": ["shell+1", 3], "counts": "shell"}))


@pytest.mark.parametrize("name", OUTLINE_SCHEMAS)
def test_dims_stand_nowhere_where_a_failing_branch_is_no_error(name: str) -> None:
    """`check_outline` lets the vocabulary report itself as errors, which is sound only outside these keywords."""
    for schema in subschemas(load_schema(name)):
        for keyword in ("if", "not", "oneOf", "anyOf"):
            branches = schema.get(keyword, [])
            for branch in branches if isinstance(branches, list) else [branches]:
                for below in subschemas(branch):
                    assert not VOCABULARY_ONLY_HERE & set(below)
                    assert not str(below.get("$ref", "")).endswith("packed")


@pytest.mark.parametrize("name", OUTLINE_SCHEMAS)
def test_everything_is_described_and_shapes_fit_their_ranks(name: str) -> None:
    document = load_schema(name)
    for entry in entries(layout(name)):
        assert entry.description, entry.path
        assert entry.description.endswith("."), entry.path
        if entry.kind == "dataset":
            assert entry.dtypes, entry.path
            number = "float64" in entry.dtypes
            assert bool(entry.units) == number, f"{entry.path}: floats have units, others have none"
            assert entry.written_as or "complex128" in entry.dtypes, entry.path
    for schema in subschemas(document):
        if "dims" in schema and "$ref" in schema and schema["$ref"].rpartition("_")[2].isdecimal():
            assert int(schema["$ref"].rpartition("_")[2]) == len(schema["dims"]), schema


def test_a_form_goes_by_its_own_name_too() -> None:
    assert load_schema("pade") is load_schema("jastrow/pade")


def test_an_unknown_schema_is_a_clear_error() -> None:
    with pytest.raises(FileError, match="jastrow/pade"):
        load_schema("jastrow/nothing")
    with pytest.raises(FileError):
        load_schema("../pyproject")


# Group of the file -> class of the model, with the fields that are no members of that group.
CLASSES: dict[str, tuple[type, set[str]]] = {
    "/": (model.Wavefunction, {"unread"}),
    "/system": (model.System, set()),
    "/system/cell": (model.Cell, set()),
    "/potentials": (model.Potentials, set()),
    "/basis": (model.Basis, set()),
    "/orbitals/<set>": (model.OrbitalSet, set()),
    "/expansion": (model.Expansion, set()),
    "/jastrow/<term>": (model.JastrowTerm, {"attributes", "members"}),
    "/hamiltonian": (model.Hamiltonian, set()),
    "/hamiltonian/two_body/both": (model.TwoBody, set()),
    "/densities": (model.Densities, set()),
    "/energies": (model.Energies, set()),
    "/witness": (model.Witness, set()),
    "/witness/orbitals/<set>": (model.WitnessOrbitals, set()),
    "/witness/configurations": (model.WitnessConfigurations, set()),
    "/provenance": (model.Provenance, set()),
}
NOT_IN_THE_MODEL = {"/": {"format", "version", "content_digest", "digests"}}
RENAMED = {"/hamiltonian": {"packing": "complex_orbitals"}}


def steps_to(path: str) -> tuple[tuple[str, str], ...]:
    return tuple(("members", name) for name in path.strip("/").split("/") if name)


@pytest.mark.parametrize("path", CLASSES)
def test_every_field_of_the_model_is_in_the_schema_and_the_reverse(path: str) -> None:
    kind, others = CLASSES[path]
    place = find(layout(), steps_to(path))
    assert place is not None
    rename = RENAMED.get(path, {})
    in_schema = {rename.get(name, name) for name in (*place.attributes, *place.members)}
    in_model = {f.name for f in dataclasses.fields(kind)}
    assert in_schema - NOT_IN_THE_MODEL.get(path, set()) == in_model - others


@pytest.mark.parametrize("path", [p for p in CLASSES if p not in ("/", "/jastrow/<term>")])
def test_optional_in_the_schema_is_optional_in_the_model(path: str) -> None:
    kind, _ = CLASSES[path]
    place = find(layout(), steps_to(path))
    assert place is not None
    fields = {f.name: f for f in dataclasses.fields(kind)}
    for entry in [p.entry for p in (*place.attributes.values(), *place.members.values())]:
        name = entry.path.replace("@", "/").rpartition("/")[2]
        name = RENAMED.get(path, {}).get(name, name)
        field = fields[name]
        has_default = not (field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING)
        if (path, name) in {("/hamiltonian", "complex_orbitals"), ("/provenance", "steps")}:
            continue  # a default in the model, always written to the file
        assert has_default is not entry.required, entry.path


def test_rank_and_type_in_the_docstrings_of_the_model() -> None:
    """The shapes that the model's docstrings give have as many axes as those of the schema."""
    import inspect
    import re

    checked = 0
    for path, (kind, _) in CLASSES.items():
        place = find(layout(), steps_to(path))
        assert place is not None
        source = inspect.getsource(kind)
        for name, below in place.members.items():
            match = re.search(rf'^    {name}: .*\n    """\((.*?)\)', source, re.MULTILINE)
            if match and below.entry.kind == "dataset":
                axes = [a for a in match[1].split(",") if a.strip()]
                if re.fullmatch(r"[A-Za-z0-9+_ ,]+", match[1]) and " or" not in match[1]:
                    assert len(axes) == len(below.entry.dims), f"{below.entry.path}: model {match[0]}"
                    checked += 1
    assert checked > 30


def test_entries_are_plain_data() -> None:
    assert all(isinstance(entry, Entry) for entry in entries(layout()))
    json.dumps([dataclasses.asdict(entry) for entry in entries(layout())])
