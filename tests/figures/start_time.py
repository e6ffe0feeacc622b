"""Start-up times in one run: ``afterkick --help`` and ``afterkick check`` against importing scipy.signal.

python tests/figures/start_time.py --times 15

The commands take turns, so that whatever else the machine does meets all of them; the medians are compared.  The goal
is --help below a fifth, and check of a 4th-order design below the whole, of the import.
"""

import argparse
import subprocess
import sys
from pathlib import Path
from statistics import median
from tempfile import TemporaryDirectory
from time import perf_counter

HELP_GOAL = 0.2
CHECK_GOAL = 1.0

FOURTH_ORDER = """
[design]
name = "fourth"

[model]
kind = "blocks"

[[model.block]]
type      = "lowpass"
family    = "butterworth"
order     = 4
corner_hz = 100

[sampling]
rate_hz = 2000
method  = "bilinear"

[budget]
magnitude_db = 3
band_hz      = 100
"""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--times", type=int, default=15)
    options = parser.parse_args()
    with TemporaryDirectory() as folder:
        design = Path(folder) / "fourth.toml"
        design.write_text(FOURTH_ORDER, encoding="utf-8")
        commands = {
            "import scipy.signal": ["-c", "import scipy.signal"],
            "afterkick --help": ["-m", "afterkick", "--help"],
            "afterkick check": ["-m", "afterkick", "check", str(design)],
        }
        seconds: dict[str, list[float]] = {name: [] for name in commands}
        for round_number in range(options.times + 1):
            for name, arguments in commands.items():
                start = perf_counter()
                subprocess.run([sys.executable, *arguments], check=True, stdout=subprocess.DEVNULL)
                if round_number:  # the first round fills the caches
                    seconds[name].append(perf_counter() - start)
    medians = {name: median(times) for name, times in seconds.items()}
    whole = medians["import scipy.signal"]
    for name, value in medians.items():
        print(f"{name:<20} {1000 * value:7.1f} ms  {value / whole:6.3f} of the import")
    holds = medians["afterkick --help"] < HELP_GOAL * whole and medians["afterkick check"] < CHECK_GOAL * whole
    print("goals hold" if holds else f"goals missed: --help below {HELP_GOAL}, check below {CHECK_GOAL}")
    raise SystemExit(not holds)


if __name__ == "__main__":
    main()
