"""The shapes vocabulary: extents that must agree across the file.

``"dims": ["orbital:{set}", "shell+1", 3]`` gives one expression for each axis. A name is bound to the extent it meets
first, in the order of the schema, and every other occurrence must agree. ``{set}`` stands for the name that the
wildcard member marked ``"binds": "set"`` has. ``"counts": "up_electron"`` binds a name to the value of an attribute.
Expressions: sums and products of names and integers, and ``pairs(x) = x(x+1)/2``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import lru_cache

from qwfx.schema_check.problems import SchemaProblem

__all__ = ["Expression", "Ledger", "parse"]

TOKEN = re.compile(r"\s*(?:(\d+)|([a-z][a-z_]*(?::(?:\{[a-z]+\}|[a-z_]+))?)|([+*()]))")


@dataclass(frozen=True)
class Expression:
    """A number, a name, or a sum, product or pair count of expressions."""

    kind: str
    number: int = 0
    name: str = ""
    parts: tuple[Expression, ...] = ()

    def names(self) -> Iterator[str]:
        """Every name in it, from left to right."""
        if self.kind == "name":
            yield self.name
        for part in self.parts:
            yield from part.names()

    def value(self, known: Mapping[str, int]) -> int | None:
        """Its value, or None if a name is not known."""
        if self.kind == "number":
            return self.number
        if self.kind == "name":
            return known.get(self.name)
        values = [part.value(known) for part in self.parts]
        if any(v is None for v in values):
            return None
        numbers = [v for v in values if v is not None]
        if self.kind == "pairs":
            return numbers[0] * (numbers[0] + 1) // 2
        total = 0 if self.kind == "sum" else 1
        for number in numbers:
            total = total + number if self.kind == "sum" else total * number
        return total

    def filled(self, bindings: Mapping[str, str]) -> Expression:
        """The same with ``{name}`` replaced by what it stands for."""
        if self.kind == "name":
            name = re.sub(r"\{([a-z]+)\}", lambda match: bindings.get(match[1], match[0]), self.name)
            return Expression("name", name=name)
        return Expression(self.kind, self.number, parts=tuple(part.filled(bindings) for part in self.parts))

    def solved(self, extent: int, known: Mapping[str, int]) -> tuple[str, int] | None:
        """The one unknown name and the value that gives `extent`; for a name, or a sum with one unknown name in it."""
        if self.kind == "name":
            return (self.name, extent)
        if self.kind != "sum":
            return None
        unknown = [part for part in self.parts if part.value(known) is None]
        if len(unknown) != 1 or unknown[0].kind != "name":
            return None
        rest = extent - sum(value for part in self.parts if (value := part.value(known)) is not None)
        return (unknown[0].name, rest) if rest >= 0 else None


@lru_cache(maxsize=512)
def parse(text: str | int) -> Expression:
    """Read an expression. Raises ValueError if it is not one (an error of the schema, not of a file)."""
    tokens: list[str] = []
    source, at = str(text), 0
    while at < len(source):
        match = TOKEN.match(source, at)
        if match is None:
            raise ValueError(f"not an expression of dims: {source!r} at {at}")
        tokens.append(match[0].strip())
        at = match.end()
    expression = _sum(tokens, source)
    if tokens:
        raise ValueError(f"not an expression of dims: {source!r}, left over: {''.join(tokens)}")
    return expression


def _sum(tokens: list[str], source: str) -> Expression:
    parts = [_product(tokens, source)]
    while tokens and tokens[0] == "+":
        tokens.pop(0)
        parts.append(_product(tokens, source))
    return parts[0] if len(parts) == 1 else Expression("sum", parts=tuple(parts))


def _product(tokens: list[str], source: str) -> Expression:
    parts = [_factor(tokens, source)]
    while tokens and tokens[0] == "*":
        tokens.pop(0)
        parts.append(_factor(tokens, source))
    return parts[0] if len(parts) == 1 else Expression("product", parts=tuple(parts))


def _factor(tokens: list[str], source: str) -> Expression:
    token = tokens.pop(0) if tokens else ""
    if token.isdecimal():
        return Expression("number", int(token))
    if token == "pairs" and tokens[:1] == ["("]:
        tokens.pop(0)
        inner = _sum(tokens, source)
        if tokens[:1] == [")"]:
            tokens.pop(0)
            return Expression("pairs", parts=(inner,))
    elif token[:1].isalpha():
        return Expression("name", name=token)
    raise ValueError(f"not an expression of dims: {source!r}")


@dataclass(frozen=True)
class _Axis:
    path: str
    axis: int
    """-1 for the value of an attribute."""
    extent: int
    expression: Expression
    text: str

    @property
    def place(self) -> str:
        return self.path if self.axis < 0 else f"axis {self.axis} of {self.path}"


@dataclass
class Ledger:
    """Extents met in one outline, and what they say of each other."""

    meanings: dict[str, str] = field(default_factory=dict)
    """Name of a dimension, with or without its suffix -> what it counts, in words."""
    axes: list[_Axis] = field(default_factory=list)

    def shape(self, path: str, shape: list[int], dims: list[str | int], bindings: Mapping[str, str]) -> None:
        """Enter the shape of a dataset. A wrong rank is for JSON Schema to say, and is passed over here."""
        if len(shape) == len(dims):
            for axis, (extent, text) in enumerate(zip(shape, dims, strict=True)):
                self.axes.append(_Axis(path, axis, extent, parse(text).filled(bindings), str(text)))

    def count(self, path: str, value: int, name: str, bindings: Mapping[str, str]) -> None:
        """Enter the value of an attribute that counts something."""
        self.axes.append(_Axis(path, -1, value, parse(name).filled(bindings), name))

    def problems(self) -> Iterator[SchemaProblem]:
        """Every axis that disagrees with what was met before it."""
        known: dict[str, int] = {}
        origin: dict[str, str] = {}
        # Names that stand alone first, so that a sum or a product is judged by them and not the reverse.
        for simple in (True, False):
            for axis in self.axes:
                if (axis.expression.kind == "name") is simple and axis.expression.value(known) is None:
                    solution = axis.expression.solved(axis.extent, known)
                    if solution is not None and solution[0] not in known:
                        known[solution[0]] = solution[1]
                        origin[solution[0]] = axis.place
        for axis in self.axes:
            value = axis.expression.value(known)
            if value is not None and value != axis.extent:
                yield self._disagreement(axis, value, known, origin)

    def _disagreement(
        self, axis: _Axis, value: int, known: Mapping[str, int], origin: Mapping[str, str]
    ) -> SchemaProblem:
        names = list(dict.fromkeys(axis.expression.names()))
        if axis.expression.kind == "name":
            because = f"{value}, the number of {self._words(names[0])}, as in {origin[names[0]]}"
        elif names:
            given = ", ".join(f"{known[n]} {self._words(n)} as in {origin[n]}" for n in names)
            because = f"{value} = {axis.text}, with {given}"
        else:
            because = str(value)
        what = "value" if axis.axis < 0 else f"extent of axis {axis.axis}"
        return SchemaProblem(
            axis.path,
            because,
            f"{what} {axis.extent}",
            "make the two agree: one of them was cut, repeated or written in another order of axes" if names
            else "write the axes in the order that FORMAT.md gives",
            "dims",
        )  # fmt: skip

    def _words(self, name: str) -> str:
        if name in self.meanings:
            return self.meanings[name]
        base, _, suffix = name.partition(":")
        words = self.meanings.get(base, base.replace("_", " "))
        return f"{words} ({suffix})" if suffix else words
