"""From a file to a model."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from qwfx import model
from qwfx.errors import FormatError, VersionError
from qwfx.storage.convert import as_kind, native, texts
from qwfx.storage.inventory import SIGNATURE, Inventory, connect, damage, take_inventory
from qwfx.storage.lazy import StoredArray
from qwfx.storage.members import GROUPS, AttributeSpec, Kind, MemberSpec

__all__ = ["is_qwfx", "load"]

SPINS = ("both", "up", "down")
SPIN_PAIRS = ("both", "up_up", "up_down", "down_down")
HAMILTONIAN_ATTRIBUTES = (
    AttributeSpec("n_orbitals", "int"),
    AttributeSpec("packing", "text"),
    AttributeSpec("up_set", "text", optional=True),
    AttributeSpec("down_set", "text", optional=True),
    AttributeSpec("state_symmetry", "int", optional=True),
)


def is_qwfx(path: str | Path) -> bool:
    """Whether a file says of itself that it is a .qwfx file; False for anything else, absent files included."""
    try:
        with open(path, "rb") as stream:
            if stream.read(len(SIGNATURE)) != SIGNATURE:
                return False
        with h5py.File(path, "r", locking=False) as file:
            told = file.attrs.get("format")
            return bool((told.decode() if isinstance(told, bytes) else str(told)) == model.FORMAT_NAME)
    except Exception:  # whatever is wrong with the file, it does not say that it is one of ours
        return False


def load(path: str | Path, *, lazy_above: int = 1 << 20) -> model.Wavefunction:
    """Read a .qwfx file.

    Parameters
    ----------
    path : the file.
    lazy_above : members of more bytes than this stay in the file until they are sliced (`qwfx.model.LazyArray`).

    Raises
    ------
    FileError : absent, unreadable, not HDF5, damaged.
    UnsafeFileError : it contains what a reader must refuse.
    VersionError : its major version is not known.
    FormatError : it does not follow FORMAT.md, so that no model can be made of it.
    """
    where = Path(path)
    file = connect(where)
    try:
        reader = _Reader(file, where, take_inventory(file, where), lazy_above)
        with damage(where):
            return reader.wavefunction()
    finally:
        if not (locals().get("reader") and reader.lazy):
            file.close()


class _Reader:
    def __init__(self, file: h5py.File, path: Path, entries: Inventory, lazy_above: int) -> None:
        self.file, self.path, self.entries, self.lazy_above = file, path, entries, lazy_above
        self.lazy = False
        self.known: set[str] = {"/", "/digests"}

    def bad(self, member: str, found: str, expected: str, remedy: str = "") -> FormatError:
        return FormatError(
            found,
            where=f"{self.path}:{member}",
            expected=expected,
            remedy=remedy or "run `qwfx validate` on the file, and write it again with the program that made it",
        )

    def has(self, member: str) -> bool:
        return member in self.entries

    def names(self, group: str) -> list[str]:
        """Names of the members of a group that exists or not, sorted."""
        self.known.add(group)
        prefix = group + "/"
        tails = (p[len(prefix) :] for p in self.entries if p.startswith(prefix))
        return sorted(tail for tail in tails if "/" not in tail)

    def check_version(self) -> None:
        root = self.entries["/"].attributes
        told = root.get("format")
        if told != model.FORMAT_NAME:
            raise self.bad(
                "/@format",
                f"is {told!r}" if told else "the file does not say that it is a .qwfx file",
                f"{model.FORMAT_NAME!r}",
                "convert it: `qwfx convert SRC DST.qwfx`",
            )
        version = str(root.get("version", ""))
        major, dot, minor = version.partition(".")
        if not (dot and major.isdecimal() and minor.isdecimal()):
            raise self.bad("/@version", f"is {version!r}", f"MAJOR.MINOR, such as {model.FORMAT_VERSION}")
        if major != model.FORMAT_VERSION.partition(".")[0]:
            raise VersionError(
                f"the file has version {version}",
                where=f"{self.path}:/@version",
                expected=f"{model.FORMAT_VERSION.partition('.')[0]}.x",
                remedy="install a version of qwfx that reads it",
            )

    def attribute(self, group: str, spec: AttributeSpec) -> Any:
        value = self.entries[group].attributes.get(spec.name)
        where = f"{group}@{spec.name}"
        if value is None:
            if spec.optional:
                return None
            raise self.bad(where, "is missing", {"text": "a text"}.get(spec.kind, "an integer"))
        if spec.kind == "text":
            if not isinstance(value, str):
                raise self.bad(where, f"is {value!r}", "a text")
            return value
        if isinstance(value, bool) or not isinstance(value, int):
            raise self.bad(where, f"is {value!r}", "an integer")
        return bool(value) if spec.kind == "flag" else value

    def array(self, member: str, kind: Kind, rank: int | None, big: bool = False) -> Any:
        """One dataset, checked for type and rank; lazy if it is big."""
        entry = self.entries[member]
        self.known.add(member)
        if entry.kind != "dataset":
            raise self.bad(member, "is a group", "a dataset")
        if rank is not None and len(entry.shape) != rank:
            raise self.bad(member, f"has {len(entry.shape)} axes", f"{rank}")
        where = f"{self.path}:{member}"
        if big and entry.size > self.lazy_above:
            self.lazy = True
            return StoredArray(self.file[member], kind, self.path)
        with damage(self.path, member):
            stored = np.asarray(self.file[member][()])
        return as_kind(stored, kind, where)

    def member(self, group: str, spec: MemberSpec) -> Any:
        path = f"{group}/{spec.name}"
        if not self.has(path):
            if spec.optional:
                return None
            raise self.bad(path, "is missing", "a dataset")
        array = self.array(path, spec.kind, spec.rank, spec.big)
        return tuple(str(t) for t in array) if spec.kind == "text" else array

    def fields(self, group: str, pattern: str | None = None) -> dict[str, Any]:
        """The fields that the table lists for a group, read."""
        spec = GROUPS[pattern or group.lstrip("/")]
        self.known.add(group)
        if self.entries[group].kind != "group":
            raise self.bad(group, "is a dataset", "a group")
        values = {a.name: self.attribute(group, a) for a in spec.attributes}
        return values | {m.name: self.member(group, m) for m in spec.members}

    def whole(self, group: str, pattern: str | None = None, **more: Any) -> Any:
        """The dataclass of a group, or None if the group is absent."""
        if not self.has(group):
            return None
        return GROUPS[pattern or group.lstrip("/")].build(**self.fields(group, pattern), **more)

    def hamiltonian(self) -> model.Hamiltonian | None:
        group = "/hamiltonian"
        if not self.has(group):
            return None
        self.known.add(group)
        told = {spec.name: self.attribute(group, spec) for spec in HAMILTONIAN_ATTRIBUTES}
        packing = told.pop("packing")
        if packing not in ("real", "complex"):
            raise self.bad(f"{group}@packing", f"is {packing!r}", "'real' or 'complex'")
        core = self.member(group, MemberSpec("core_energy", "float64", 0))
        return model.Hamiltonian(
            core_energy=float(core),
            one_body=self.keyed(f"{group}/one_body", SPINS, "number", 2),
            two_body={
                pair: self.whole(f"{group}/two_body/{pair}", "hamiltonian/two_body/*")
                for pair in self.names(f"{group}/two_body")
                if pair in SPIN_PAIRS
            },
            complex_orbitals=packing == "complex",
            orbital_energies=self.keyed(f"{group}/orbital_energies", SPINS, "float64", 1),
            orbital_symmetry=self.member(group, MemberSpec("orbital_symmetry", "int32", 1, optional=True)),
            **told,
        )

    def keyed(self, group: str, keys: tuple[str, ...], kind: Kind, rank: int) -> dict[str, Any]:
        """The datasets of a group by name."""
        return {key: self.array(f"{group}/{key}", kind, rank, True) for key in self.names(group) if key in keys}

    def densities(self) -> model.Densities | None:
        if not self.has("/densities"):
            return None
        self.known.add("/densities")
        return model.Densities(
            self.keyed("/densities/one_body", SPINS, "number", 3),
            self.keyed("/densities/two_body", SPIN_PAIRS, "number", 5),
        )

    def jastrow_term(self, name: str) -> model.JastrowTerm:
        group = f"/jastrow/{name}"
        form = self.attribute(group, AttributeSpec("form", "text"))
        attributes = {key: v for key, v in self.entries[group].attributes.items() if key != "form"}
        return model.JastrowTerm(form, attributes, self.free_members(group, nested=False))

    def free_members(self, group: str, nested: bool) -> dict[str, Any]:
        """Members whose names and types are data: arrays as they are stored, and groups where they may be nested."""
        members: dict[str, Any] = {}
        for name in self.names(group):
            path = f"{group}/{name}"
            self.known.add(path)
            if self.entries[path].kind == "dataset":
                with damage(self.path, path):
                    array = np.asarray(self.file[path][()])
                members[name] = texts(array, f"{self.path}:{path}") if array.dtype.kind == "S" else native(array)
            elif nested:
                members[name] = self.node(path)
            else:
                raise self.bad(path, "is a group", "a dataset")
        return members

    def node(self, group: str) -> model.Node:
        return model.Node(dict(self.entries[group].attributes), self.free_members(group, nested=True))

    def extensions(self) -> dict[str, model.Node]:
        owners = {}
        for owner in self.names("/extensions"):
            if self.entries[f"/extensions/{owner}"].kind != "group":
                raise self.bad(f"/extensions/{owner}", "is a dataset", "a group named for its owner")
            owners[owner] = self.node(f"/extensions/{owner}")
        return owners

    def witness(self) -> model.Witness | None:
        sets = {n: self.whole(f"/witness/orbitals/{n}", "witness/orbitals/*") for n in self.names("/witness/orbitals")}
        return self.whole("/witness", orbitals=sets, configurations=self.whole("/witness/configurations"))  # type: ignore[no-any-return]

    def provenance(self) -> model.Provenance:
        if not self.has("/provenance"):
            return model.Provenance()
        self.known.add("/provenance")
        text = str(np.asarray(self.array("/provenance/steps", "text", 0))) if self.has("/provenance/steps") else "[]"
        try:
            steps = json.loads(text)
        except (ValueError, RecursionError) as error:
            raise self.bad("/provenance/steps", f"is not JSON ({error})", "a JSON array of steps") from None
        if not isinstance(steps, list) or not all(isinstance(step, dict) for step in steps):
            raise self.bad("/provenance/steps", "is not a list of objects", "a JSON array of steps")
        return model.Provenance(tuple(steps))

    def wavefunction(self) -> model.Wavefunction:
        self.check_version()
        if not self.has("/system"):
            raise self.bad("/system", "is missing", "a group with the nuclei and electrons")
        found = model.Wavefunction(
            system=self.whole("/system", cell=self.whole("/system/cell")),
            potentials=self.whole("/potentials"),
            basis=self.whole("/basis"),
            orbitals={n: self.whole(f"/orbitals/{n}", "orbitals/*") for n in self.names("/orbitals")},
            expansion=self.whole("/expansion"),
            jastrow={name: self.jastrow_term(name) for name in self.names("/jastrow")},
            hamiltonian=self.hamiltonian(),
            densities=self.densities(),
            energies=self.whole("/energies"),
            witness=self.witness(),
            provenance=self.provenance(),
            extensions=self.extensions(),
        )
        return dataclasses.replace(found, unread=self.unread())

    def unread(self) -> tuple[str, ...]:
        """Members that this reader did not look at, the topmost of each branch only."""
        strange = sorted(p for p in self.entries if p not in self.known and not p.startswith("/digests/"))
        return tuple(p for p in strange if not any(p.startswith(q + "/") for q in strange))
