"""Run the peers side by side, each run in a fresh process, and print their medians and ratios."""

from __future__ import annotations

import argparse
import json
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

PEERS = ("direct", "model", "by hand")
HERE = Path(__file__).parent


def one_run(peer: str, design: list[str], caches: Path) -> dict[str, float]:
    environment = os.environ | {
        "BAYES_SYS_CACHE": str(caches / "density"),
        "PYTENSOR_FLAGS": f"blas__ldflags=,base_compiledir={caches / 'pytensor'}",
        "NUMBA_CACHE_DIR": str(caches / "numba"),
        "OPENBLAS_NUM_THREADS": "1",
        "RACE_STARTED": repr(time.time()),
    }
    command = [sys.executable, str(HERE / "peers.py"), peer, *design]
    done = subprocess.run(command, env=environment, capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(f"{peer} failed:\n{done.stderr[-2000:]}")
    return json.loads(done.stdout.strip().splitlines()[-1])


def race(design: list[str], runs: int, cold: int) -> dict[tuple[str, str], list[dict[str, float]]]:
    """Warm and cold figures of every peer, the peers in turn."""
    found: dict[tuple[str, str], list[dict[str, float]]] = {}
    with tempfile.TemporaryDirectory() as folder:
        for round_ in range(cold):
            for peer in PEERS:
                caches = Path(folder) / f"cold-{round_}-{peer.replace(' ', '-')}"
                found.setdefault((peer, "cold"), []).append(one_run(peer, design, caches))
        warm = Path(folder) / "warm"
        for round_ in range(runs + 1):
            for peer in PEERS:
                figures = one_run(peer, design, warm)
                if round_:  # the first fills the caches
                    found.setdefault((peer, "warm"), []).append(figures)
    return found


def table(found: dict[tuple[str, str], list[dict[str, float]]]) -> str:
    names = list(next(iter(found.values()))[0])
    lines = ["| peer | caches | runs | " + " | ".join(names) + " | total, ratio to direct |"]
    lines.append("|---" * (len(names) + 4) + "|")
    for state in ("cold", "warm"):
        base = (
            statistics.median(f["total s"] for f in found["direct", state])
            if ("direct", state) in found
            else 0
        )
        for peer in PEERS:
            runs = found.get((peer, state), [])
            if not runs:
                continue
            medians = [statistics.median(f[name] for f in runs) for name in names]
            cells = [
                f"{m:,.0f}" if m >= 100 or name == "divergences" else f"{m:.1f}"
                for name, m in zip(names, medians, strict=True)
            ]
            lines.append(
                f"| {peer} | {state} | {len(runs)} | " + " | ".join(cells) + f" | {medians[0] / base:.1f} |"
            )
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    for name, default in (("equations", 4), ("periods", 20), ("regressors", 3), ("runs", 5), ("cold", 1)):
        parser.add_argument(f"--{name}", type=int, default=default)
    given = parser.parse_args()
    design = [str(given.equations), str(given.periods), str(given.regressors)]
    found = race(design, given.runs, given.cold)
    print(
        f"{time.strftime('%Y-%m-%d')}, {platform.machine()}, {os.cpu_count()} cores, "
        f"Python {platform.python_version()}"
    )
    size = f"{given.equations} equations, {given.periods} periods, {given.regressors} regressors"
    print(f"{size}; 4 chains of 1000 + 1000\n")
    print(table(found))


if __name__ == "__main__":
    main()
