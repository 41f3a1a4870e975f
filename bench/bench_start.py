"""How long the light verbs take as whole processes, against the bare interpreter."""

from __future__ import annotations

import subprocess
import sys
import tempfile
from pathlib import Path

from bench.harness import side_by_side


def main() -> None:
    """`qwfx --help` and `qwfx show` of a small file."""
    from qwfx.conversion import convert
    from qwfx.demo import MOLECULES, compute

    command = str(Path(sys.executable).parent / "qwfx")
    with tempfile.TemporaryDirectory() as folder:
        _, checkpoint = compute(MOLECULES[0], Path(folder))
        small = Path(folder) / "small.qwfx"
        convert(checkpoint, small)

        def run(*words: str) -> None:
            subprocess.run(words, check=True, capture_output=True)

        for words in ((command, "--help"), (command, "show", str(small))):
            side_by_side(
                f"qwfx {words[1]}: ratio to importing numpy alone",
                {
                    f"qwfx {words[1]}": lambda w=words: run(*w),
                    "python -c 'import numpy'": lambda: run(sys.executable, "-c", "import numpy"),
                },
                runs=9,
            )


if __name__ == "__main__":
    main()
