"""What a user would write instead: static gain by SciPy's BFGS with the analytic gradient and SciPy's Lyapunov
solver, for a continuous plant stable without control. Works on the problem files of against_script.py.
As a module: tune(problem) -> (J, K, seconds) from K = 0. As a command: script_tuner.py FILE [STARTS], from K = 0
and random gains, prints the best J and K."""
import json
import sys
import time

import numpy as np
from scipy.linalg import solve_continuous_lyapunov
from scipy.optimize import minimize


def tune(problem, start_gain=None):
    plant, weights = problem["plant"], problem["weights"]
    A, B, C = (np.array(plant[key]) for key in "ABC")
    Q, R = (np.array(weights[key]) for key in "QR")
    W = np.array(problem["disturbance"]["W"])
    shape = (B.shape[1], C.shape[0])

    def cost(k):
        K = k.reshape(shape)
        Acl = A - B @ K @ C
        if np.linalg.eigvals(Acl).real.max() >= 0:
            return 1e20, np.zeros_like(k)
        P = solve_continuous_lyapunov(Acl.T, -(Q + C.T @ K.T @ R @ K @ C))
        X = solve_continuous_lyapunov(Acl, -W)
        gradient = 2 * (R @ K @ C - B.T @ P) @ X @ C.T
        return np.trace(P @ W), gradient.ravel()

    start = time.perf_counter()
    k0 = np.zeros(shape[0] * shape[1]) if start_gain is None else start_gain
    J0 = cost(k0)[0]
    scaled = lambda k: tuple(part / J0 for part in cost(k))
    found = minimize(scaled, k0, jac=True, method="BFGS", options={"gtol": 1e-9, "maxiter": 2000})
    return found.fun * J0, found.x.reshape(shape), time.perf_counter() - start


if __name__ == "__main__":
    given = json.load(open(sys.argv[1], encoding="utf-8"))
    rng = np.random.default_rng(1)
    gains = len(given["plant"]["B"][0]) * len(given["plant"]["C"])
    starts = int(sys.argv[2]) if len(sys.argv) > 2 else 8
    answers = [tune(given, None if i == 0 else 0.1 * rng.standard_normal(gains)) for i in range(starts)]
    J, K, _ = min(answers, key=lambda answer: answer[0])
    print(J, K.tolist())
