"""From a file to a model."""

from __future__ import annotations

import dataclasses
import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from qwfx import model
from qwfx.errors import FormatError, VersionError
from qwfx.storage.convert import as_kind, native, texts
from qwfx.storage.inventory import Inventory, root_attributes, take_inventory
from qwfx.storage.lazy import OpenFile, StoredArray
from qwfx.storage.members import GROUPS, SPIN_PAIRS, SPINS, AttributeSpec, Kind, MemberSpec
from qwfx.storage.opening import connect, damage, has_signature, refuse_more_than_memory

__all__ = ["is_qwfx", "load"]

ROOT_ATTRIBUTES = ("format", "version", "content_digest")
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
        if not has_signature(path):
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
        check_version(root_attributes(file, where), where)
        reader = _Reader(file, where, take_inventory(file, where), lazy_above)
        with damage(where):
            wavefunction = reader.wavefunction()
    except BaseException:
        file.close()
        raise
    if not reader.lazy:
        file.close()
    return wavefunction


REMEDY = "run `qwfx validate` on the file, and write it again with the program that made it"


def check_version(root: dict[str, Any], path: Path) -> None:
    """Raise FormatError if the file is not one of ours, VersionError if it is of a major version that is not known."""
    told = root.get("format")
    if told != model.FORMAT_NAME:
        raise FormatError(
            f"is {told!r}" if told else "the file does not say that it is a .qwfx file",
            where=f"{path}:/@format",
            expected=f"{model.FORMAT_NAME!r}",
            remedy="convert it: `qwfx convert SRC DST.qwfx`",
        )
    version = str(root.get("version", ""))
    numbers = re.fullmatch(r"(0|[1-9][0-9]*)\.(0|[1-9][0-9]*)", version)
    where, known = f"{path}:/@version", model.FORMAT_VERSION.partition(".")[0]
    if not numbers:
        raise FormatError(
            f"is {version!r}",
            where=where,
            expected=f"MAJOR.MINOR, such as {model.FORMAT_VERSION}",
            remedy=REMEDY,
        )
    if numbers[1] != known:
        raise VersionError(
            f"the file has version {version}",
            where=where,
            expected=f"{known}.x",
            remedy="install a version of qwfx that reads it",
        )


class _Reader:
    def __init__(self, file: h5py.File, path: Path, entries: Inventory, lazy_above: int) -> None:
        self.file, self.path, self.entries, self.lazy_above = file, path, entries, lazy_above
        self.opened: OpenFile | None = None
        self.eager = 0
        self.known: set[str] = {"/"}
        self.known_attributes: dict[str, set[str]] = {"/": set(ROOT_ATTRIBUTES)}

    @property
    def lazy(self) -> bool:
        """Whether any member stayed in the file."""
        return self.opened is not None

    def bad(self, member: str, found: str, expected: str) -> FormatError:
        return FormatError(
            found,
            where=f"{self.path}:{member}",
            expected=expected,
            remedy=REMEDY,
        )

    def has(self, member: str) -> bool:
        return member in self.entries

    def group(self, path: str, *attributes: str) -> bool:
        """Whether there is a group at `path`, and that it and these attributes of it are looked at."""
        if path not in self.entries:
            return False
        if self.entries[path].kind != "group":
            raise self.bad(path, "is a dataset", "a group")
        self.known.add(path)
        self.known_attributes.setdefault(path, set()).update(attributes)
        return True

    def names(self, group: str) -> list[str]:
        """Names of the members of a group that exists or not, sorted."""
        return sorted(self.entries[group].members) if self.group(group) else []

    def load_now(self, member: str) -> Any:
        """The whole of a dataset as it is stored."""
        entry = self.entries[member]
        self.known.add(member)
        self.eager += entry.size
        refuse_more_than_memory(self.eager, self.path, member)
        with damage(self.path, member):
            return np.asarray(self.file[member][()])

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
            self.opened = self.opened or OpenFile(self.file)
            return StoredArray(self.opened, member, kind, self.path)
        return as_kind(self.load_now(member), kind, where)

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
        self.group(group, *(a.name for a in spec.attributes))
        values = {a.name: self.attribute(group, a) for a in spec.attributes}
        return values | {m.name: self.member(group, m) for m in spec.members}

    def whole(self, group: str, pattern: str | None = None, **more: Any) -> Any:
        """The dataclass of a group, or None if the group is absent."""
        if not self.has(group):
            return None
        return GROUPS[pattern or group.lstrip("/")].build(**self.fields(group, pattern), **more)

    def hamiltonian(self) -> model.Hamiltonian | None:
        group = "/hamiltonian"
        if not self.group(group, *(spec.name for spec in HAMILTONIAN_ATTRIBUTES)):
            return None
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
        if not self.group("/densities"):
            return None
        return model.Densities(
            self.keyed("/densities/one_body", SPINS, "number", 3),
            self.keyed("/densities/two_body", SPIN_PAIRS, "number", 5),
        )

    def jastrow_term(self, name: str) -> model.JastrowTerm:
        group = f"/jastrow/{name}"
        self.group(group, *self.entries[group].attributes)
        form = self.attribute(group, AttributeSpec("form", "text"))
        attributes = {key: v for key, v in self.entries[group].attributes.items() if key != "form"}
        return model.JastrowTerm(form, attributes, self.free_members(group, nested=False))

    def free_members(self, group: str, nested: bool) -> dict[str, Any]:
        """Members whose names and types are data: arrays as they are stored, and groups where they may be nested.

        A group where none may be stays unread, as it comes from a newer version.
        """
        members: dict[str, Any] = {}
        for name in self.names(group):
            path = f"{group}/{name}"
            if self.entries[path].kind == "dataset":
                array = self.load_now(path)
                members[name] = texts(array, f"{self.path}:{path}") if array.dtype.kind == "S" else native(array)
            elif nested:
                members[name] = self.node(path)
        return members

    def node(self, group: str) -> model.Node:
        self.group(group, *self.entries[group].attributes)
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
        if not self.group("/provenance"):
            return model.Provenance()
        text = str(np.asarray(self.array("/provenance/steps", "text", 0))) if self.has("/provenance/steps") else "[]"
        try:
            steps = json.loads(text)
        except (ValueError, RecursionError) as error:
            raise self.bad("/provenance/steps", f"is not JSON ({error})", "a JSON array of steps") from None
        if not isinstance(steps, list) or not all(isinstance(step, dict) for step in steps):
            raise self.bad("/provenance/steps", "is not a list of objects", "a JSON array of steps")
        return model.Provenance(tuple(steps))

    def wavefunction(self) -> model.Wavefunction:
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
        """What this reader did not look at: the topmost member of each branch, and attributes as ``path@name``."""
        return tuple(sorted(self.strange("/")))

    def strange(self, path: str) -> Iterator[str]:
        if path == "/digests":
            return  # made anew by whoever writes the file
        if path not in self.known:
            yield path
            return
        entry = self.entries[path]
        known = self.known_attributes.get(path, set())
        yield from (f"{path}@{name}" for name in entry.attributes if name not in known)
        for name in entry.members:
            yield from self.strange(f"{path.rstrip('/')}/{name}")
