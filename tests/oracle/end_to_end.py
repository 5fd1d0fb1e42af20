"""The flatgain program from problem file to result against SciPy and NumPy, which share no code with it.
Usage: /usr/bin/python3 tests/oracle/end_to_end.py build/flatgain

Random plants with a fixed seed, both settings, with N, D, noise (continuous: with sensor lags). Formulas:
u = -F (C x + v), F = (I + K D)^-1 K; covariance and Riccati equations by scipy.linalg, optima by
scipy.optimize from many starts, poles by numpy, margins from a dense grid and from poles, average cost from
long simulations. One line a check, at the end `N passed, N failed`."""
import json
import os
import subprocess
import sys
import tempfile
import warnings

import numpy as np
from scipy.linalg import (expm, solve_continuous_are, solve_continuous_lyapunov, solve_discrete_are,
                          solve_discrete_lyapunov)
from scipy.optimize import minimize

warnings.filterwarnings("ignore", category=RuntimeWarning)
count = {"passed": 0, "failed": 0}


def check(name, good, text=""):
    count["passed" if good else "failed"] += 1
    print("%s %s%s" % ("ok    " if good else "FAILED", name, ": " + text if text else ""))


def close(name, value, expected, relative):
    error = abs(value - expected) / max(abs(expected), 1e-300)
    check(name, error <= relative, "%.12g, expected %.12g" % (value, expected))


class Plant:
    """A, B, C, D, Q, R, N, W, V; continuous: lag (p), None without noise."""

    def __init__(self, random, discrete, n, m, p, feedthrough, noise):
        self.discrete, self.n, self.m, self.p = discrete, n, m, p
        self.A = random.standard_normal((n, n)) / np.sqrt(n) * (0.9 if discrete else 1)
        if not discrete:
            self.A -= 0.6 * np.eye(n)
        self.B = random.standard_normal((n, m))
        self.C = random.standard_normal((p, n))
        self.D = 0.2 * random.standard_normal((p, m)) if feedthrough else np.zeros((p, m))
        H = random.standard_normal((n + m, n + m))
        weights = H.T @ H
        self.Q, self.N, self.R = weights[:n, :n], weights[:n, n:], weights[n:, n:]
        G = random.standard_normal((n, n))
        self.W = G @ G.T
        Gv = 0.5 * random.standard_normal((p, p))
        self.V = Gv @ Gv.T if noise else np.zeros((p, p))
        self.lag = random.uniform(0.05, 0.5, p) if noise and not discrete else None

    def problem(self):
        rows = lambda a: a.tolist()
        out = {"setting": "discrete" if self.discrete else "continuous",
               "plant": {"A": rows(self.A), "B": rows(self.B), "C": rows(self.C), "D": rows(self.D)},
               "disturbance": {"W": rows(self.W)},
               "weights": {"Q": rows(self.Q), "R": rows(self.R), "N": rows(self.N)}}
        if self.V.any():
            out["noise"] = {"V": rows(self.V)}
            if self.lag is not None:
                out["noise"]["lag"] = [self.lag.tolist()]
        return out

    def law_plant(self):
        """What the static law sees: with sensor lags, tau dyf/dt = C x + D u + v - yf and the law reads yf."""
        if self.lag is None:
            return self
        law = Plant.__new__(Plant)
        n, m, p, slow = self.n, self.m, self.p, np.diag(1 / self.lag)
        law.discrete, law.n, law.m, law.p, law.lag = False, n + p, m, p, None
        law.A = np.block([[self.A, np.zeros((n, p))], [slow @ self.C, -slow]])
        law.B = np.vstack([self.B, slow @ self.D])
        law.C = np.hstack([np.zeros((p, n)), np.eye(p)])
        law.D = np.zeros((p, m))
        law.Q = np.block([[self.Q, np.zeros((n, p))], [np.zeros((p, n + p))]])
        law.R, law.N = self.R, np.vstack([self.N, np.zeros((p, m))])
        law.W = np.block([[self.W, np.zeros((n, p))], [np.zeros((p, n)), slow @ self.V @ slow]])
        law.V = np.zeros((p, p))
        return law

    def loop(self, K):
        """F, Acl, Wcl, Qcl; None when I + K D is singular."""
        M = np.eye(self.m) + K @ self.D
        if abs(np.linalg.det(M)) < 1e-9:
            return None
        F = np.linalg.solve(M, K)
        L = F @ self.C
        BF = self.B @ F
        return (F, self.A - self.B @ L, self.W + BF @ self.V @ BF.T,
                self.Q - self.N @ L - (self.N @ L).T + L.T @ self.R @ L)

    def cost(self, K):
        loop = self.loop(K)
        if loop is None or not np.all(np.isfinite(loop[1])):
            return np.inf
        F, A, W, Q = loop
        poles = np.linalg.eigvals(A)
        if self.discrete:
            if np.max(np.abs(poles)) >= 1:
                return np.inf
            X = solve_discrete_lyapunov(A, W)
        else:
            if np.max(poles.real) >= 0:
                return np.inf
            X = solve_continuous_lyapunov(A, -W)  # SciPy solves A X + X A' = q
        J = np.trace(Q @ X) + (np.trace(F.T @ self.R @ F @ self.V) if self.discrete else 0)
        return J if J > 0 else np.inf

    def lqr(self):
        solve = solve_discrete_are if self.discrete else solve_continuous_are
        S = solve(self.A, self.B, self.Q, self.R, s=self.N)
        return S, np.trace(S @ self.W)

    def lqg(self):
        """V > 0 only. The discrete law uses the newest reading: the filtered covariance."""
        S, J = self.lqr()
        if self.discrete:
            P = solve_discrete_are(self.A.T, self.C.T, self.W, self.V)
            P = P - P @ self.C.T @ np.linalg.solve(self.C @ P @ self.C.T + self.V, self.C @ P)
            M = self.R + self.B.T @ S @ self.B
            L = np.linalg.solve(M, self.B.T @ S @ self.A + self.N.T)
        else:
            P = solve_continuous_are(self.A.T, self.C.T, self.W, self.V)
            M = self.R
            L = np.linalg.solve(M, self.B.T @ S + self.N.T)
        return J + np.trace(L.T @ M @ L @ P)


def run(program, *arguments):
    done = subprocess.run([program, *arguments], capture_output=True, text=True, timeout=120)
    return done.returncode, (json.loads(done.stdout) if done.stdout else None), done.stderr


def best_by_scipy(plant, K, random, starts):
    """Lowest cost BFGS reaches from random stabilising gains and from around K."""
    shape, best, runs = K.shape, np.inf, 0
    size = np.max(np.abs(K))

    def objective(theta):
        J = plant.cost(theta.reshape(shape))
        return np.log(J) if np.isfinite(J) else 1e3

    for trial in range(60 * starts):
        spread = [0.01, 0.1, 0.5, 1, 3][trial % 5]
        start = (K if trial % 2 else 0) + spread * size * random.standard_normal(shape)
        if not np.isfinite(plant.cost(start)):
            continue
        found = minimize(objective, start.ravel(), method="BFGS", options={"gtol": 1e-7, "maxiter": 300})
        best = min(best, np.exp(found.fun))
        runs += 1
        if runs == starts:
            break
    return best, runs


def poles_agree(name, reported, expected):
    left = [complex(p["re"], p["im"]) for p in reported]
    worst = 0.0
    for pole in expected:
        if not left:
            worst = np.inf
            break
        k = int(np.argmin([abs(pole - other) for other in left]))
        worst = max(worst, abs(pole - left.pop(k)) / max(1, abs(pole)))
    check(name, worst < 1e-6 and not left, "off by %.1e" % worst)


def sensitivity(plant, K, w):
    """S = (I + K G)^-1 at the plant inputs, G = C (z I - A)^-1 B + D."""
    z = np.exp(1j * w) if plant.discrete else 1j * w
    G = plant.C @ np.linalg.solve(z * np.eye(plant.n) - plant.A, plant.B) + plant.D
    return np.linalg.inv(np.eye(plant.m) + K @ G)


def stable(plant, K):
    return np.isfinite(plant.cost(K))


def margins_agree(name, plant, K, margins):
    frequencies = np.linspace(1e-4, np.pi, 6000) if plant.discrete else np.logspace(-4, 4, 6000)
    S = np.array([sensitivity(plant, K, w) for w in frequencies])
    largest = np.max(np.linalg.norm(S, 2, axis=(1, 2)))
    peak = margins["peak_sensitivity"]
    check(name + " peak sensitivity", largest * (1 - 1e-6) <= peak <= max(largest, 1) * (1 + 2e-3),
          "%.8g, on the grid %.8g" % (peak, largest))
    for i, loop in enumerate(margins["loops"]):
        one = name + " input %d" % (i + 1)
        peak = np.max(np.abs(S[:, i, i]))
        check(one + " peak", peak * (1 - 1e-6) <= loop["peak_sensitivity"] <= max(peak, 1) * (1 + 2e-3),
              "%.8g, on the grid %.8g" % (loop["peak_sensitivity"], peak))

        def scaled(factor):
            other = K.copy()
            other[i] *= factor
            return stable(plant, other)

        up, down = loop["gain_up"], loop["gain_down"]
        inside = np.concatenate([np.geomspace(max(down, 1e-6) * (1 + 1e-6), 1, 60),
                                 np.geomspace(1, up * (1 - 1e-6) if up else 1e3, 60)])
        check(one + " gains between the margins are stable", all(scaled(f) for f in inside))
        if up:
            check(one + " upper gain margin", not scaled(up * (1 + 1e-6)), "%.8g" % up)
        if down:
            check(one + " lower gain margin", not scaled(down * (1 - 1e-6)), "%.8g" % down)
        L = 1 / S[:, i, i] - 1  # this loop broken, the others closed
        crossing = np.nonzero((np.abs(L[:-1]) - 1) * (np.abs(L[1:]) - 1) < 0)[0]
        if len(crossing):
            angle = np.min(np.degrees(np.abs(np.angle(-L[np.concatenate([crossing, crossing + 1])]))))
            reported = loop["phase_deg"] if loop["phase_deg"] is not None else np.inf
            check(one + " phase margin", abs(reported - angle) < 0.6, "%.6g, on the grid %.6g" % (reported, angle))
        if loop["phase_deg"] is not None:
            w = loop["phase_frequency"]
            at = 1 / sensitivity(plant, K, w)[i, i] - 1
            check(one + " crosses where it says", abs(abs(at) - 1) < 1e-6 and
                  abs(np.degrees(abs(np.angle(-at))) - loop["phase_deg"]) < 1e-5, "|L| %.9g" % abs(at))


def one_plant(program, folder, index, plant, random):
    name = "%s %d (n %d, m %d, p %d%s%s)" % ("discrete" if plant.discrete else "continuous", index, plant.n, plant.m,
                                            plant.p, ", D" if plant.D.any() else "", ", V" if plant.V.any() else "")
    path = os.path.join(folder, "problem%d.json" % index)
    with open(path, "w", encoding="utf-8") as out:
        json.dump(plant.problem(), out)
    status, result, errors = run(program, "tune", "--json", path)
    law = plant.law_plant()
    if result is None or result["outcome"] in ("not-found", "impossible"):
        tries = [law.cost(10 ** random.uniform(-1, 1) * random.standard_normal((law.m, law.p))) for _ in range(2000)]
        check(name + " not found", status in (3, 4) and not np.any(np.isfinite(tries)), errors.strip()[:200])
        return
    if result["outcome"] == "unbounded":
        check(name + " unbounded", plant.D.any() and status == 1)
        return
    K = np.array(result["gain"]["K"])
    J = result["cost"]["tuned"]
    check(name + " outcome", result["outcome"] == "tuned" and status == 0, result["outcome"])
    close(name + " cost", law.cost(K), J, 1e-8)
    best, runs = best_by_scipy(law, K, random, 12)
    check(name + " nothing better", runs >= 3 and best >= J * (1 - 1e-6), "%.12g, SciPy %.12g from %d starts" %
          (J, best, runs))
    check(name + " SciPy gets there", best <= J * (1 + 1e-5), "%.12g, SciPy %.12g" % (J, best))
    close(name + " LQR", result["cost"]["lqr"], plant.lqr()[1], 1e-8)
    if plant.V.any():
        close(name + " LQG", result["cost"]["lqg"], plant.lqg(), 1e-7)
        check(name + " LQG attained", result["cost"]["lqg_is"] == "attained")
    check(name + " order of costs", result["cost"]["lqr"] <= result["cost"]["lqg"] * (1 + 1e-12) and
          result["cost"]["lqg"] <= J * (1 + 1e-9))
    poles_agree(name + " poles", result["poles"], np.linalg.eigvals(law.loop(K)[1]))
    poles_agree(name + " open poles", result["open_poles"], np.linalg.eigvals(law.A))
    margins_agree(name, law, K, result["margins"])
    # a gain in hand
    other = K * (1 + 0.2 * random.standard_normal(K.shape))
    gain = os.path.join(folder, "gain%d.csv" % index)
    np.savetxt(gain, other, delimiter=",", fmt="%.17g")
    status, judged, errors = run(program, "judge", "--json", path, "--gain", gain)
    expected = law.cost(other)
    if np.isfinite(expected):
        close(name + " judged", judged["cost"]["judged"], expected, 1e-8)
    else:
        check(name + " judged unstable", judged["cost"]["judged"] is None and status == 1)


def simulate(program, folder, plant, random, name, step):
    """Average cost of a long simulation, 400 paths side by side, within three sigma of J. The continuous loop
    is stepped exactly: transition and noise of one step from one exponential (Van Loan, IEEE TAC 23 (1978))."""
    path = os.path.join(folder, "simulated.json")
    with open(path, "w", encoding="utf-8") as out:
        json.dump(plant.problem(), out)
    _, result, _ = run(program, "tune", "--json", path)
    K, J = np.array(result["gain"]["K"]), result["cost"]["tuned"]
    law = plant.law_plant()
    F, A, W, Q = law.loop(K)
    n, paths, steps = law.n, 400, 4000
    if plant.discrete:
        transition = A
        root, noise_root = np.linalg.cholesky(plant.W), np.linalg.cholesky(plant.V + 1e-300 * np.eye(plant.p))
    else:
        block = expm(step * np.block([[-A, W], [np.zeros((n, n)), A.T]]))
        transition = block[n:, n:].T
        covariance = transition @ block[:n, n:]
        root = np.linalg.cholesky((covariance + covariance.T) / 2)
    x, sums, used = np.zeros((n, paths)), np.zeros(paths), 0
    for k in range(steps):
        if plant.discrete:
            v = noise_root @ random.standard_normal((plant.p, paths))
            y = np.linalg.solve(np.eye(plant.p) + plant.D @ K, plant.C @ x + v)  # y = C x + D u + v, u = -K y
            u = -K @ y
            now = (np.sum(x * (plant.Q @ x), 0) + 2 * np.sum(x * (plant.N @ u), 0) + np.sum(u * (plant.R @ u), 0))
            x = plant.A @ x + plant.B @ u + root @ random.standard_normal((n, paths))
        else:
            now = np.sum(x * (Q @ x), 0)
            x = transition @ x + root @ random.standard_normal((n, paths))
        if k >= steps // 4:
            sums += now
            used += 1
    averages = sums / used
    mean, sigma = np.mean(averages), np.std(averages, ddof=1) / np.sqrt(paths)
    check(name, abs(mean - J) <= 3 * sigma and sigma < 0.02 * J, "J %.6g, simulated %.6g +- %.2g" % (J, mean, sigma))


def main():
    program = sys.argv[1]
    random = np.random.default_rng(20240611)
    with tempfile.TemporaryDirectory() as folder:
        index = 0
        for discrete in (False, True):
            for trial in range(14):
                plant = Plant(random, discrete, 2 + trial % 5, 1 + trial % 2, 1 + trial // 2 % 2, trial % 3 == 0,
                              trial % 4 < 2)
                one_plant(program, folder, index, plant, random)
                index += 1
        simulate(program, folder, Plant(random, True, 3, 1, 2, True, True), random, "discrete simulation", None)
        simulate(program, folder, Plant(random, False, 3, 2, 1, True, True), random, "continuous simulation", 0.05)
    print("%d passed, %d failed" % (count["passed"], count["failed"]))
    return 1 if count["failed"] else 0


if __name__ == "__main__":
    sys.exit(main())
