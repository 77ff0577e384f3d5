"""What a user would write instead: read the log, take the strays out, smooth it.

    python -m tests.speed.script night.log

Nothing is judged, and a spoilt line stops it. It is what a replay is measured against.
"""

import sys

import pandas as pd


def main() -> None:
    """Read, running median of 9, EWMA; say where the period ends."""
    log = pd.read_csv(sys.argv[1], comment="#")
    median = log["period_us"].rolling(9, center=True).median()
    smooth = median.ewm(alpha=0.02).mean()
    print(f"{len(log)} rows, {smooth.iloc[-1]:.3f} us")


if __name__ == "__main__":
    main()
