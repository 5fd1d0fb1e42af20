"""flatgain against the script a user would write instead (script_tuner.py), same plants, same start, in one
run: median ratio of seconds, for the same local search and for the whole of `tune` (8 or more starts,
benchmarks, modes, margins). The script's time leaves out starting Python and importing SciPy.
Usage: against_script.py BENCH_TUNE"""
import json
import subprocess
import sys
import tempfile

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


def main():
    worst = 0
    print(f"{'n':>4} {'m x p':>6} {'script ms':>10} {'local ms':>9} {'ratio':>7} {'tune ms':>9} {'ratio':>7} {'costs':>6} {'same J to':>10}  target")
    for n, target in TARGETS.items():
        random = np.random.default_rng(n)
        m, p = (2, 2) if n < 20 else (3, 3)
        rows, agree = [], 0.0
        for _ in range(PLANTS):
            problem = plant(random, n, m, p)
            J, _, seconds = min((tune(problem) for _ in range(3 if n <= 20 else 1)), key=lambda answer: answer[2])
            with tempfile.NamedTemporaryFile("w", suffix=".yaml") as file:
                json.dump(problem, file)
                file.flush()
                out = subprocess.run([sys.argv[1], file.name], capture_output=True, text=True, check=True).stdout.split()
            agree = max(agree, abs(float(out[0]) - J) / J)
            rows.append((seconds, float(out[1]), float(out[4]), float(out[2])))
        script, local, whole, costs = (float(np.median([row[i] for row in rows])) for i in range(4))
        ratio = float(np.median([row[0] / row[1] for row in rows]))
        ratio_whole = float(np.median([row[0] / row[2] for row in rows]))
        worst = max(worst, agree)
        print(f"{n:4d} {m} x {p:<2d} {1e3 * script:10.2f} {1e3 * local:9.3f} {ratio:7.0f} {1e3 * whole:9.2f} {ratio_whole:7.1f} {costs:6.0f} {agree:10.1e}  {target}")
    print(f"largest relative difference of the optimum: {worst:.1e}")


main()
