"""Check the object that ``fadeline demo --headless --json`` printed: python tests/check_demo_result.py FILE."""

from __future__ import annotations

import json
import sys
from pathlib import Path


def complaints(result: dict) -> list[str]:
    """What is wrong with a demo's result; empty when it recovered what was rendered."""
    found = []
    for row in result["targets"]:
        if row["mu"] is None or abs(row["mu"] - row["mu_true"]) > 0.04:
            found.append(f"mu {row['mu']} is not within 0.04 of {row['mu_true']}")
        if row["nights"] < 8:
            found.append(f"only {row['nights']} nights")
    for band, row in result["photometry"].items():
        if abs(row["mean_offset"]) > 0.005:
            found.append(f"{band}: mean offset {row['mean_offset']}")
    # Twelve nights of one band scatter by 0.4 in reduced chi2 even when all is well: the bands are taken together
    # here, and tests/demo_seeds.py judges each band over twenty seeds.
    rows = result["photometry"].values()
    chi2 = sum(row["chi2_reduced"] * row["n"] for row in rows) / max(sum(row["n"] for row in rows), 1)
    if not 0.7 <= chi2 <= 1.4:
        found.append(f"nightly chi2 {chi2:.2f}")
    if sorted(result["photometry"]) != ["B", "I", "R", "V"]:
        found.append(f"bands {sorted(result['photometry'])}")
    return found


if __name__ == "__main__":
    wrong = complaints(json.loads(Path(sys.argv[1]).read_text()))
    print("\n".join(wrong) or "the demo recovered what was rendered")
    sys.exit(bool(wrong))
