"""Outlines for the tests, written with a few helpers; ``schema/examples/`` holds them as JSON for everybody.

``python tests/schema_outlines.py`` writes the examples anew.
"""

from __future__ import annotations

import copy
import json
from pathlib import Path
from typing import Any

EXAMPLES = Path(__file__).parents[1] / "schema" / "examples"
Json = dict[str, Any]


def data(dtype: str, *shape: int) -> Json:
    node: Json = {"kind": "dataset", "dtype": dtype, "shape": list(shape), "attributes": {}}
    return {**node, "length": 4} if dtype == "string" else node


def group(attributes: Json | None = None, **members: Json) -> Json:
    words = {k: value if isinstance(value, dict) else attribute(value) for k, value in (attributes or {}).items()}
    return {"kind": "group", "attributes": words, "members": members}


def attribute(value: str | int, dtype: str = "") -> Json:
    return {"dtype": dtype or ("string" if isinstance(value, str) else "int64"), "shape": [], "value": value}


def digests(n_items: int = 5, n_blocks: int = 5) -> Json:
    return group(
        {"block_bytes": 1 << 20},
        path=data("string", n_items),
        digest=data("uint8", n_items, 32),
        block_start=data("int64", n_items + 1),
        block_digest=data("uint8", n_blocks, 32),
    )


def minimal() -> Json:
    """The smallest file: an electron and no centre."""
    root = {"format": "qwfx", "version": "1.0", "content_digest": "0123456789abcdef" * 4}
    system = group(
        {"n_up": 1, "n_down": 0},
        labels=data("string", 0),
        atomic_numbers=data("int32", 0),
        effective_charges=data("float64", 0),
        positions=data("float64", 0, 3),
    )
    return group(root, system=system, digests=digests())


def everything() -> Json:
    """All groups, spin-resolved, complex orbitals in a cell, 2 states: 3 atoms, 4 shells, 12 functions."""
    root = minimal()
    members = root["members"]
    members["system"] = group(
        {"n_up": 3, "n_down": 2},
        labels=data("string", 3),
        atomic_numbers=data("int32", 3),
        effective_charges=data("float64", 3),
        positions=data("float64", 3, 3),
        cell=group(vectors=data("float64", 3, 3), kpoints=data("float64", 4, 3)),
    )
    members["potentials"] = group(
        center=data("int32", 6), channel=data("int32", 6), power=data("int32", 6),
        exponent=data("float64", 6), coefficient=data("float64", 6),
    )  # fmt: skip
    members["basis"] = group(
        {"radial": "gaussian"},
        shell_center=data("int32", 4), shell_l=data("int32", 4), shell_monomial=data("int8", 4),
        primitive_start=data("int64", 5), exponents=data("float64", 9), coefficients=data("float64", 9),
        powers=data("int32", 9),
    )  # fmt: skip
    members["orbitals"] = group(up=orbital_set("up", 8), down=orbital_set("down", 7))
    members["expansion"] = group(
        {"up_set": "up", "down_set": "down"},
        up_strings=data("uint64", 5, 1), down_strings=data("uint64", 6, 1), row_start=data("int64", 6),
        columns=data("int64", 11), coefficients=data("complex128", 2, 11), discarded_weight=data("float64", 2),
    )  # fmt: skip
    members["jastrow"] = group(
        pairs=group(
            {"form": "pade", "body": "electron-electron"},
            channel=data("string", 3), a=data("float64", 3), b=data("float64", 3),
        ),
        nuclei=group(
            {"form": "bspline", "body": "electron-nucleus"},
            channel=data("string", 2), atoms=data("int32", 1), cutoff=data("float64", 2),
            coefficients=data("float64", 2, 6),
        ),
        triples=group(
            {"form": "cutoff-polynomial", "body": "three-body", "smoothness": 3},
            channel=data("string", 3), atoms=data("int32", 2), cutoff=data("float64", 3),
            coefficients=data("float64", 3, 4, 4, 3),
        ),
        scaled=group(
            {"form": "scaled-polynomial", "body": "three-body"},
            channel=data("string", 3), atoms=data("int32", 2), scale=data("float64", 3),
            scale_electron=data("float64", 3), powers=data("int32", 7, 3), coefficients=data("float64", 3, 7),
        ),
    )  # fmt: skip
    members["hamiltonian"] = group(
        {"n_orbitals": 7, "packing": "complex", "up_set": "up", "down_set": "down", "state_symmetry": 0},
        core_energy=data("float64"),
        one_body=group(up=data("complex128", 7, 7), down=data("complex128", 7, 7)),
        two_body=group(
            up_up=group(values=data("complex128", 49 * 50 // 2)),
            up_down=group(values=data("complex128", 49 * 49)),
            down_down=group(values=data("complex128", 31), index=data("uint64", 31)),
        ),
        orbital_energies=group(up=data("float64", 7), down=data("float64", 7)),
        orbital_symmetry=data("int32", 7),
    )
    members["densities"] = group(
        one_body=group(up=data("complex128", 2, 7, 7), down=data("complex128", 2, 6, 6)),
        two_body=group(up_down=data("complex128", 2, 7, 7, 6, 6)),
    )
    members["energies"] = group(
        state=data("int32", 2), method=data("string", 2), value=data("float64", 2),
        uncertainty=data("float64", 2), quantity=data("string", 2),
    )  # fmt: skip
    members["witness"] = group(
        {"evaluator": "pyscf", "evaluator_version": "2.6.0", "independent": 1},
        points=data("float64", 48, 3),
        orbitals=group(
            up=group(values=data("complex128", 48, 8), gradients=data("complex128", 48, 8, 3),
                     laplacians=data("complex128", 48, 8)),
            down=group(values=data("complex128", 48, 7), gradients=data("complex128", 48, 7, 3),
                       laplacians=data("complex128", 48, 7)),
        ),
        configurations=group(
            positions=data("float64", 9, 5, 3), log_abs=data("float64", 2, 9), sign=data("complex128", 2, 9),
            gradients=data("complex128", 2, 9, 5, 3), laplacian=data("complex128", 2, 9),
            potential=data("complex128", 2, 9), local_energy=data("complex128", 2, 9),
        ),
    )  # fmt: skip
    members["provenance"] = group(steps=data("string"))
    members["extensions"] = group(laboratory=group({"note": "free"}, readings=data("float32", 4)))
    return root


def orbital_set(spin: str, n: int) -> Json:
    return group(
        {"spin": spin},
        coefficients=data("complex128", n, 12), energies=data("float64", n), occupations=data("float64", n),
        roles=data("string", n), irreps=data("string", n), kpoint=data("int32", n),
    )  # fmt: skip


def restricted() -> Json:
    """One set for both spins, real, with a Hamiltonian packed eightfold: 6 orbitals, 21 pairs, 231 integrals."""
    root = minimal()
    full = everything()["members"]
    for name in ("system", "basis", "provenance"):
        root["members"][name] = full[name]
    del root["members"]["system"]["members"]["cell"]
    del root["members"]["basis"]["members"]["powers"]
    root["members"]["orbitals"] = group(
        spatial=group({"spin": "both"}, coefficients=data("float64", 6, 12), occupations=data("float64", 6))
    )
    root["members"]["hamiltonian"] = group(
        {"n_orbitals": 6, "packing": "real", "up_set": "spatial", "down_set": "spatial"},
        core_energy=data("float64"),
        one_body=group(both=data("float64", 6, 6)),
        two_body=group(both=group(values=data("float64", 231))),
    )
    return root


def at(outline: Json, path: str) -> Json:
    """The node of a member."""
    for name in path.strip("/").split("/"):
        outline = outline["members"][name]
    return outline


def defects() -> dict[str, tuple[str, bool, list[tuple[str, str]], Json]]:
    """Name -> (what is wrong, whether plain JSON Schema accepts it, (path, keyword) of each problem, outline)."""
    found: dict[str, tuple[str, bool, list[tuple[str, str]], Json]] = {}

    def add(name: str, title: str, plain: bool, problems: list[tuple[str, str]], base: Json) -> None:
        found[name] = (title, plain, problems, base)

    o = restricted()
    del o["members"]["basis"]["members"]["shell_l"]
    add("missing-member", "A required dataset is missing", False, [("/basis/shell_l", "required")], o)

    o = restricted()
    o["members"]["basis"]["members"]["exponent"] = o["members"]["basis"]["members"].pop("exponents")
    add("misspelt-member", "A dataset under a name that is nearly right", False,
        [("/basis/exponents", "required"), ("/basis/exponent", "additionalProperties")], o)  # fmt: skip

    o = restricted()
    at(o, "basis")["attributes"]["radial"] = attribute("gausian")
    add("misspelt-word", "An attribute with a word that is nearly right", False, [("/basis@radial", "enum")], o)

    o = restricted()
    at(o, "system/positions")["dtype"] = "float32"
    add("single-precision", "Positions in single precision", False, [("/system/positions", "dtype")], o)

    o = restricted()
    at(o, "system/positions")["shape"] = [9]
    add("flat-positions", "Positions as one long row", False, [("/system/positions", "shape")], o)

    o = restricted()
    at(o, "system/positions")["shape"] = [3, 2]
    add("two-coordinates", "Positions with two coordinates", False, [("/system/positions", "shape")], o)

    o = restricted()
    o["members"]["basis"] = data("float64", 3)
    add("dataset-for-group", "A dataset stands where a group should", False, [("/basis", "kind")], o)

    o = restricted()
    del o["members"]["basis"]
    add("orbitals-without-basis", "Orbitals over nothing", False, [("/basis", "required")], o)

    o = restricted()
    at(o, "orbitals/spatial/coefficients")["shape"] = [12, 6]
    add("transposed-orbitals", "Coefficients with functions as rows", True,
        [("/orbitals/spatial/occupations", "dims")], o)  # fmt: skip

    o = restricted()
    at(o, "hamiltonian/two_body/both/values")["shape"] = [230]
    add("short-integrals", "A packed vector that lacks an element", True,
        [("/hamiltonian/two_body/both/values", "dims")], o)  # fmt: skip

    o = restricted()
    at(o, "hamiltonian/one_body/both")["dtype"] = "complex128"
    add("complex-for-real", "Complex integrals in a real packing", False,
        [("/hamiltonian/one_body/both", "dtype")], o)  # fmt: skip

    o = restricted()
    at(o, "hamiltonian")["members"]["one_body"] = group(up=data("float64", 6, 6))
    add("half-spin-resolved", "One spin of two", False, [("/hamiltonian/one_body", "oneOf"),
        ("/hamiltonian/two_body/both", "condition")], o)  # fmt: skip

    o = everything()
    at(o, "system")["attributes"]["n_down"] = attribute(1)
    add("electron-count", "Configurations with more electrons than the system", True,
        [("/witness/configurations/positions", "dims"), ("/witness/configurations/gradients", "dims")], o)  # fmt: skip

    o = everything()
    at(o, "jastrow/nuclei")["attributes"]["body"] = attribute("electron-electron")
    add("atoms-of-a-pair-term", "An electron-electron term with a list of atoms", False,
        [("/jastrow/nuclei/atoms", "condition")], o)  # fmt: skip

    o = everything()
    at(o, "jastrow/pairs")["attributes"]["form"] = attribute("padde")
    add("unknown-form", "A Jastrow form that is not registered", True, [("/jastrow/pairs@form", "enum")], o)

    o = everything()
    at(o, "jastrow/scaled/powers")["shape"] = [6, 3]
    add("jastrow-extent", "A Jastrow term with more coefficients than powers", True,
        [("/jastrow/scaled/powers", "dims")], o)  # fmt: skip

    o = restricted()
    o["attributes"]["version"] = attribute("2.0")
    add("major-version", "A major version that this schema does not describe", False, [("/@version", "pattern")], o)

    o = restricted()
    o["attributes"]["version"] = attribute("1.3")
    at(o, "system")["members"]["masses"] = data("float64", 3)
    add("newer-minor", "A member that a newer minor version may have added", False,
        [("/system/masses", "additionalProperties")], o)  # fmt: skip
    return found


VALID = {
    "minimal": ("The smallest file", minimal),
    "restricted": ("One set of real orbitals and a Hamiltonian", restricted),
    "everything": ("Every group and every optional member", everything),
}


def write() -> None:
    """Write ``schema/examples``."""
    EXAMPLES.mkdir(exist_ok=True)
    documents: dict[str, Json] = {
        f"valid-{name}": {"title": title, "plain_json_schema": "accepts", "problems": [], "outline": make()}
        for name, (title, make) in VALID.items()
    }
    for name, (title, plain, problems, outline) in defects().items():
        documents[f"defective-{name}"] = {
            "title": title,
            "plain_json_schema": "accepts" if plain else "refuses",
            "problems": [{"path": path, "keyword": keyword} for path, keyword in problems],
            "outline": copy.deepcopy(outline),
        }
    for name, document in documents.items():
        (EXAMPLES / f"{name}.json").write_text(compact(document) + "\n", "utf-8")


def compact(value: Any, indent: int = 0, width: int = 116) -> str:
    """JSON that puts on one line what fits there."""
    line = json.dumps(value, ensure_ascii=False)
    if len(line) + indent <= width or not isinstance(value, (dict, list)):
        return line
    pad = " " * (indent + 2)
    if isinstance(value, dict):
        items = [f"{pad}{json.dumps(key)}: {compact(below, indent + 2)}" for key, below in value.items()]
        return "{\n" + ",\n".join(items) + "\n" + " " * indent + "}"
    return "[\n" + ",\n".join(pad + compact(below, indent + 2) for below in value) + "\n" + " " * indent + "]"


if __name__ == "__main__":
    write()
