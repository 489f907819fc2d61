"""Twenty demos, with and without intrinsic scatter: python tests/demo_seeds.py [N] [--scatter]; prints a table.

Without scatter every |mu - mu_true| must be <= 0.04 and every band's mean offset <= 5 mmag; the nightly reduced chi2
is pooled over all seeds for each band, as one seed holds too few nights to judge it. With scatter the pull of mu must
have rms 0.7-1.3 and at most two beyond 2.5.
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from collections import defaultdict
from pathlib import Path

import numpy as np


def one(seed: int, scatter: bool, folder: Path) -> dict:
    """The result object of one demo."""
    command = [sys.executable, "-m", "tui.cli", "demo", "--headless", "--json", "--seed", str(seed)]
    command += ["--folder", str(folder / f"demo-{seed}"), *(["--scatter"] if scatter else [])]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    return json.loads(done.stdout)


def main() -> int:
    """Run the seeds, print the table, return 1 when a bound is broken."""
    scatter = "--scatter" in sys.argv
    numbers = [word for word in sys.argv[1:] if not word.startswith("-")]
    broken: list[str] = []
    pulls, chi2 = [], defaultdict(list)
    print("seed   mu - true  mu_err  fit    kept doubtful dropped   offset B V R I (mmag)        chi2 B V R I     s")
    for seed in range(1, int(numbers[0] if numbers else 20) + 1):
        with tempfile.TemporaryDirectory() as folder:
            result = one(seed, scatter, Path(folder))
        row, bands = result["targets"][0], result["photometry"]
        delta = row["mu"] - row["mu_true"]
        pulls.append(delta / row["mu_err"])
        offsets = [1000 * bands[b]["mean_offset"] for b in "BVRI"]
        for b in "BVRI":
            chi2[b].append((bands[b]["chi2_reduced"], bands[b]["n"]))
        print(
            f"{seed:4}   {delta:+8.4f}   {row['mu_err']:.3f}  {row['mu_err_fit']:.3f}  {row['frames_kept']:4} "
            f"{row['frames_doubtful']:8} {row['frames_dropped']:7}   "
            + " ".join(f"{o:+6.2f}" for o in offsets)
            + "   "
            + " ".join(f"{bands[b]['chi2_reduced']:4.2f}" for b in "BVRI")
            + f"   {result['seconds']:4.0f}",
            flush=True,
        )
        if not scatter and abs(delta) > 0.04:
            broken.append(f"seed {seed}: mu off by {delta:+.3f}")
        broken += [f"seed {seed}: offset {o:+.1f} mmag" for o in offsets if not scatter and abs(o) > 5]
    for b, rows in chi2.items():
        value = np.average([c for c, _ in rows], weights=[n for _, n in rows])
        print(f"{b}: nightly chi2 over all seeds {value:.3f}")
        if not 0.7 <= value <= 1.4:
            broken.append(f"{b}: nightly chi2 {value:.2f}")
    rms = float(np.sqrt(np.mean(np.square(pulls))))
    print(f"pull rms {rms:.2f}, beyond 2.5: {sum(abs(p) > 2.5 for p in pulls)}")
    if scatter and (not 0.7 <= rms <= 1.3 or sum(abs(p) > 2.5 for p in pulls) > 2):
        broken.append(f"pull rms {rms:.2f}")
    print("\n".join(broken) or "all bounds hold")
    return bool(broken)


if __name__ == "__main__":
    sys.exit(main())
