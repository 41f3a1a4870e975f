"""Run every benchmark, or those that are named.

``python -m bench [determinants fcidump jastrow molden moves orbitals start]``
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path


def main() -> int:
    """Each benchmark in a process of its own, so that none inherits another's threads or caches."""
    found = {path.stem.removeprefix("bench_"): path for path in sorted(Path(__file__).parent.glob("bench_*.py"))}
    if {"-h", "--help"} & set(sys.argv[1:]):
        print(f"python -m bench [{' '.join(found)}]")
        return 0
    unknown = [name for name in sys.argv[1:] if name not in found]
    if unknown:
        print(f"no benchmark is called {', '.join(unknown)}; there are {', '.join(found)}")
        return 2
    code = 0
    for name in sys.argv[1:] or found:
        print(f"== {name}", flush=True)
        code = max(code, subprocess.run([sys.executable, "-m", f"bench.bench_{name}"], check=False).returncode)
    return code


if __name__ == "__main__":
    sys.exit(main())
