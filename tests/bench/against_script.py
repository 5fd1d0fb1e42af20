"""flatgain against the script a user would write instead (script_tuner.py), same plants, in one run, median
ratios of seconds:
  search    one local search from K = 0, both inside a running process (no start of Python, no import of SciPy)
  command   `flatgain tune FILE` (8 starts or more, benchmarks, modes, margins, report) against
            `python3 script_tuner.py FILE` with as many starts
Usage: against_script.py BENCH_TUNE FLATGAIN"""
import json
import os
import subprocess
import sys
import tempfile
import time

import numpy as np

from script_tuner import tune

PLANTS = 5
TARGETS = {4: 100, 8: 100, 10: 100, 20: 20, 50: 20, 100: 10}


def plant(random, n, m, p):
    A = random.standard_normal((n, n)) / np.sqrt(n)
    A -= (np.linalg.eigvals(A).real.max() + 0.05) * np.eye(n)
    rows = lambda M: [[float(x) for x in row] for row in M]
    return {
        "setting": "continuous",
        "plant": {"A": rows(A), "B": rows(random.standard_normal((n, m))), "C": rows(random.standard_normal((p, n)))},
        "disturbance": {"W": rows(np.eye(n))},
        "weights": {"Q": rows(np.eye(n)), "R": rows(np.eye(m))},
    }


def seconds_of(command):
    """Median wall time of a whole command over three runs, and what it printed."""
    times = []
    for _ in range(3):
        start = time.perf_counter()
        out = subprocess.run(command, capture_output=True, text=True, check=True).stdout
        times.append(time.perf_counter() - start)
    return float(np.median(times)), out


def main():
    script = os.path.join(os.path.dirname(os.path.abspath(__file__)), "script_tuner.py")
    worst, other = 0, 0
    print(f"{'n':>4} {'m x p':>6} | {'script ms':>10} {'search ms':>10} {'ratio':>6} {'costs':>6} {'same J to':>10} | {'script s':>9} {'tune s':>8} {'ratio':>6} | target")
    for n, target in TARGETS.items():
        random = np.random.default_rng(n)
        m, p = (2, 2) if n < 20 else (3, 3)
        rows = []
        for index in range(PLANTS):
            problem = plant(random, n, m, p)
            J, _, seconds = min((tune(problem) for _ in range(3 if n <= 20 else 1)), key=lambda answer: answer[2])
            with tempfile.NamedTemporaryFile("w", suffix=".yaml") as file:
                json.dump(problem, file)
                file.flush()
                out = subprocess.run([sys.argv[1], file.name], capture_output=True, text=True, check=True).stdout.split()
                row = [seconds, float(out[1]), float(out[2]), abs(float(out[0]) - J) / J, np.nan, np.nan]
                if index == 0:
                    result = json.loads(seconds_of([sys.argv[2], "tune", "--json", file.name])[1])
                    starts = result["search"]["starts"]
                    row[4] = seconds_of(["/usr/bin/python3", script, file.name, str(starts)])[0]
                    row[5] = seconds_of([sys.argv[2], "tune", file.name])[0]
            rows.append(row)
        table = np.array(rows)
        same = table[:, 3] < 1e-3 # else the two descents ended in different local minima
        other += int((~same).sum())
        agree = table[same, 3].max() if same.any() else np.nan
        worst = max(worst, agree)
        ratio = float(np.median(table[:, 0] / table[:, 1]))
        print(f"{n:4d} {m} x {p:<2d} | {1e3 * np.median(table[:, 0]):10.2f} {1e3 * np.median(table[:, 1]):10.3f} {ratio:6.0f} {np.median(table[:, 2]):6.0f} {agree:10.1e} | {table[0, 4]:9.2f} {table[0, 5]:8.3f} {table[0, 4] / table[0, 5]:6.0f} | {target}")
    print(f"largest relative difference of the optimum: {worst:.1e}; {other} of {PLANTS * len(TARGETS)} descents ended in another local minimum")


main()
