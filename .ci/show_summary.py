"""Print what a run folder's summary.json says, for `make demo`."""

from __future__ import annotations

import json
import sys
from pathlib import Path


def main(folder: Path) -> None:
    """Print the outcome, the scalars a reader looks for first, and where the files are."""
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    scalars = summary["scalars"]
    rows = {
        "outcome": summary["outcome"],
        "residual": f"{summary['residual_rms']:.2e} (rms)",
        "period": f"{scalars['period']:.8g}",
        "drift": f"{scalars['drift_x']:.8g}",
        "picture": str(folder / "field.png"),
        "state": str(folder / "state.h5"),
    }
    for name, value in rows.items():
        print(f"{name:9s} {value}")


if __name__ == "__main__":
    main(Path(sys.argv[1]))
