"""The blocks of ``schema/FORMAT.md`` that are made and not written: layout tables, example dumps, the worked digest.

``python tests/format_blocks.py`` makes them anew; a test holds them equal.
"""

from __future__ import annotations

import hashlib
import json
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from qwfx.schema_check.tables import replace_blocks, with_tables

FORMAT = Path(__file__).parents[1] / "schema" / "FORMAT.md"
ROWS, COLUMNS = 6, 6
NOISE = 1e-13
WIDTH = 100


def number(value: Any) -> str:
    """Ten digits, so that the last bits of different machines do not show."""
    if isinstance(value, float):
        return "0" if abs(value) < NOISE else f"{value:.10g}"
    return json.dumps(str(value), ensure_ascii=False) if isinstance(value, str) else str(value)


def rows(array: Any) -> Iterator[str]:
    """The array, one line for each index but the last; long ones are cut."""
    flat = np.asarray(array).reshape(-1, np.shape(array)[-1]) if np.ndim(array) else np.asarray(array).reshape(1, 1)
    for row in flat[:ROWS]:
        line = "  ".join(number(v) for v in row[:COLUMNS].tolist())
        yield line + ("  ..." if len(row) > COLUMNS else "")
    if len(flat) > ROWS:
        yield f"... ({len(flat)} rows)"


def dump(raw: Any, path: str) -> str:
    """One group of a file as text: attributes, then datasets with type, shape and elements."""
    node = raw.outline
    for name in path.strip("/").split("/"):
        node = node["members"][name]
    lines = [path, *lines_of(raw, path, node, 1)]
    return "```text\n" + "\n".join(lines) + "\n```"


def lines_of(raw: Any, path: str, node: dict[str, Any], depth: int) -> Iterator[str]:
    pad = "  " * depth
    for name, attribute in node["attributes"].items():
        told = attribute["value"] if name != "evaluator_version" else "..."  # that of the machine at hand
        yield f"{pad}@{name} = {number(told)}"
    for name, member in node["members"].items():
        below = f"{path}/{name}"
        if member["kind"] == "group":
            yield f"{pad}{name}/"
            yield from lines_of(raw, below, member, depth + 1)
            continue
        kind = member["dtype"] + (f"[{member['length']}]" if "length" in member else "")
        head = f"{pad}{name}  {kind} ({', '.join(map(str, member['shape']))})"
        if path == "/digests" and name != "path":
            yield head  # depends on the last bits of the example
        elif name == "steps":
            steps = json.dumps(json.loads(str(np.asarray(raw.read(below)).item())), indent=2)
            yield f"{pad}{name}  string ()"
            yield from (f"{pad}  {line}" for line in steps.splitlines())
        else:
            elements = list(rows(raw.read(below)))
            if len(elements) == 1 and len(head) + len(elements[0]) < WIDTH:
                yield f"{head}: {elements[0]}"
            else:
                yield head
                yield from (f"{pad}  {line}" for line in elements)


def sha256(data: bytes) -> bytes:
    return hashlib.sha256(data).digest()


def item_digest(path: str, kind: str, shape: str, data: bytes) -> tuple[str, str]:
    """(block digest, digest) in hexadecimal of an item of one block (F41)."""
    block = sha256(data)
    return block.hex(), sha256(f"{path}\n{kind}\n{shape}\n".encode() + block).hex()


def worked_digest() -> str:
    """F41 and F42 for a file that has two items only."""
    items = [
        ("/system/labels", "|S2", "2", b"H1H2", '"H1", "H2"'),
        ("/system@", "json", "", b'{"n_down":1,"n_up":1}', "n_up = 1, n_down = 1"),
    ]
    lines, together = [], ""
    for path, kind, shape, data, said in items:
        block, digest = item_digest(path, kind, shape, data)
        header = f"{path}\\n{kind}\\n{shape}\\n"
        lines += [f"{path}: {said}", f'  header        "{header}"', f"  bytes         {data.decode()}",
                  f"  block_digest  {block}", f"  digest        {digest}"]  # fmt: skip
        together += f"{path} {digest}\n"
    return "\n".join(["```text", *lines, f"content_digest  {sha256(together.encode()).hex()}", "```"])


def with_examples(text: str, raw: Any) -> str:
    return replace_blocks(text, "example", lambda path: dump(raw, path))


def made(text: str, folder: Path) -> str:
    """FORMAT.md with every block made anew."""
    from example_file import everything

    from qwfx.storage import open_raw, save

    path = folder / "example.qwfx"
    save(everything(), path)
    with open_raw(path) as raw:
        text = with_examples(text, raw)
    return replace_blocks(with_tables(text), "worked digest", lambda _: worked_digest())


if __name__ == "__main__":
    with tempfile.TemporaryDirectory() as folder:
        FORMAT.write_text(made(FORMAT.read_text("utf-8"), Path(folder)), "utf-8")
