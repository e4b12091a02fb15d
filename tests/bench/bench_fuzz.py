"""A million altered inputs into everything that reads what others wrote.

``python -m tests.bench.bench_fuzz [--inputs 300000] [--seed 1] [--target NAME]``: so many inputs to a fast target, a
stated share to the slow ones that write files. Targets are registered in ``tests/fuzzing.py``; clips, pipes and serial
ports have their own in ``tests/bench/bench_fuzz_ports.py``. The exit status is 1 when anything broke.
"""

from __future__ import annotations

import argparse
import platform
import sys
import time

from tests.fuzzing import fuzz, targets


def main() -> int:
    """Run the targets and print a table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--inputs", type=int, default=300_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--target", action="append")
    args = parser.parse_args()
    print(f"{platform.machine()}, {platform.system()} {platform.release()}, Python {platform.python_version()}")
    print(f"{'target':18}{'inputs':>10}{'seconds':>9}{'kept':>6}{'broke':>7}")
    total = broke = 0
    for name, target in targets().items():
        if args.target and name not in args.target:
            continue
        began_s = time.monotonic()
        found = fuzz(target, int(args.inputs * target.share), args.seed)
        print(
            f"{name:18}{found.inputs:10d}{time.monotonic() - began_s:9.1f}{found.kept:6d}{len(found.broke):7d}",
            flush=True,
        )
        for data, text in found.broke:
            print(f"  {text}\n  {data[:200]!r}")
        total += found.inputs
        broke += len(found.broke)
    print(f"{'all':18}{total:10d}{'':15}{broke:7d}")
    return 1 if broke else 0


if __name__ == "__main__":
    sys.exit(main())
