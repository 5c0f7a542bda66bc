"""Check a reduced demo night against its truth: independent of what the demo command prints."""

import sys
from pathlib import Path

import numpy as np
from astropy.table import Table

folder = Path(sys.argv[1])
results = Table.read(folder / "reduced" / "results.ecsv")
truth = Table.read(folder / "truth.ecsv")
frames = Table.read(folder / "reduced" / "frames.ecsv")
known = {(t["target"], t["filter"]): t for t in truth if t["source"] == 0}
assert len(results) == len(known) > 10, "a target is missing from the results"
assert len(frames) == len(list((folder / "raw").glob("*.fits"))), "an input file is missing from frames.ecsv"
pulls = []
for row in results:
    true = known[row["target"], row["filter"]]
    assert row["frame"] == "sky", f"{row['target']}: not calibrated"
    for name in "qu":
        error = np.hypot(row[f"{name}_err"], row[f"{name}_cal_err"])
        pulls.append((row[name] - true[name]) / error)
worst = np.max(np.abs(pulls))
assert worst < 5, f"a value lies {worst:.1f} errors from the truth"
print(f"{len(pulls)} values, rms pull {np.sqrt(np.mean(np.square(pulls))):.2f}, largest {worst:.1f}")
