"""The scattering solver against PythonicDISORT on 240 random cloudy columns: `python tests/benchmarks/scattering_accuracy.py`."""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

import numpy as np  # noqa: E402
from scattering_samples import CHANNELS, differences  # noqa: E402


def table(count=40):
    """Rows: channel, then root-mean-square and worst error for 2, 3, 4 and 8 streams a half-sphere."""
    rows = []
    for channel in CHANNELS:
        errors = [differences(channel, count, 11, streams) for streams in (2, 3, 4, 8)]
        rows.append(
            f"| {channel} | "
            + " | ".join(f"{np.sqrt(np.mean(e**2)):.3f} / {np.abs(e).max():.3f}" for e in errors)
            + " |"
        )
    return rows


if __name__ == "__main__":
    print("| channel [um] | 2 | 3 | 4 | 8 |\n| --- | --- | --- | --- | --- |\n" + "\n".join(table()))
