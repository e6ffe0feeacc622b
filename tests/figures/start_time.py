"""Start-up times in one run: ``afterkick --help`` and ``afterkick check`` against importing scipy.signal.

python tests/figures/start_time.py --times 15

The commands take turns, so that whatever else the machine does meets all of them; the medians are compared.  The goal
is --help below a fifth, check of a 4th-order design below the whole, and check of four sections at 1,000 samples per
corner period, with all bounds, below three times the import.
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
BOUNDS_GOAL = 3.0

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

FOUR_SECTIONS = """
[design]
name = "eighth"

[model]
kind = "blocks"

[[model.block]]
type      = "lowpass"
family    = "butterworth"
order     = 8
corner_hz = 1

[sampling]
rate_hz = 1000
method  = "bilinear"

[signals]
input  = { unit = "V", full_scale = 1, peak = 0.5 }
output = { unit = "V", full_scale = 1 }

[arithmetic]
structure        = "delta"
coefficient_bits = 32

[budget]
worst_case_counts = 100
dead_band_counts  = 1
"""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--times", type=int, default=15)
    options = parser.parse_args()
    with TemporaryDirectory() as folder:
        design, slow = Path(folder) / "fourth.toml", Path(folder) / "eighth.toml"
        design.write_text(FOURTH_ORDER, encoding="utf-8")
        slow.write_text(FOUR_SECTIONS, encoding="utf-8")
        commands = {
            "import scipy.signal": ["-c", "import scipy.signal"],
            "afterkick --help": ["-m", "afterkick", "--help"],
            "afterkick check": ["-m", "afterkick", "check", str(design)],
            "four sections": ["-m", "afterkick", "check", str(slow)],
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
    goals = {"afterkick --help": HELP_GOAL, "afterkick check": CHECK_GOAL, "four sections": BOUNDS_GOAL}
    missed = [f"{name} below {goal}" for name, goal in goals.items() if medians[name] >= goal * whole]
    print(f"goals missed: {', '.join(missed)}" if missed else "goals hold")
    raise SystemExit(bool(missed))


if __name__ == "__main__":
    main()
