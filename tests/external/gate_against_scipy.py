#!/usr/bin/python3
"""The gate against independent solvers: cvxopt's interior-point method and scipy's root finder.

usage: gate_against_scipy.py PATH_TO_GATE_PROBE

Random books go to the C++ gate (gate_probe) and through the same questions written from the published
formulas in numpy:
  - the penalty, by whole-matrix products with projections (the C++ works elementwise);
  - the best move, as a quadratic programme over purchases and sales, by cvxopt (a primal-dual
    interior-point method; the C++ descends along pairs of lines);
  - the self-financing equation of Gyorfi and Vajda (2008) by scipy.optimize.brentq (the C++ sorts its kinks);
  - growth saved, horizon, payback and verdict from their definitions.
At the end every answer is spoiled a little, and the check must notice each one.
Needs Debian's python3-numpy, python3-scipy and python3-cvxopt. Exit 0: all agree.
"""
import json
import subprocess
import sys

import cvxopt
import numpy as np
from scipy.optimize import brentq

PROBLEMS = 200
OBJECTIVE_TOLERANCE = 1e-10


def invented(random):
    m = int(random.integers(2, 31))
    loading = random.uniform(0.002, 0.015, m)
    own = random.uniform(0.003, 0.025, m)
    buy = random.uniform(1e-4, 4e-3, m)
    sell = random.uniform(1e-4, 4e-3, m)
    if random.random() < 0.5:  # a cash line
        loading[-1] = own[-1] = buy[-1] = sell[-1] = 0.0
    covariation = np.outer(loading, loading) + np.diag(own**2)
    covariation += 1e-3 * np.trace(covariation) / m * np.eye(m)

    def simplex():
        shares = random.exponential(size=m) * (random.random(m) > 0.2)
        if shares.sum() == 0.0:
            shares[0] = 1.0
        return shares / shares.sum()

    wanted = simplex()
    drift = random.choice([0.02, 0.1, 0.3, 1.0])
    held = (1 - drift) * wanted + drift * simplex()
    return {
        "covariation": covariation.tolist(),
        "held": (held / held.sum()).tolist(),
        "wanted": wanted.tolist(),
        "buy": buy.tolist(),
        "sell": sell.tolist(),
        "response": float(random.choice([0.0, 0.1, 0.5])),
    }


def penalty(s, b, c, response):
    b = np.clip(b, 1e-3, 1 - 1e-3)
    b = b / b.sum()
    c = np.maximum(c, 1e-12)
    m = len(b)
    to_target = np.eye(m) - np.outer(np.ones(m), b)
    v = to_target @ s @ to_target.T
    ce = np.array([c[i] + sum(b[j] * c[j] for j in range(m) if j != i) / (1 - b[i]) for i in range(m)])
    band = (1.5 * ce * b**2 * (1 - b) ** 2) ** (1 / 3)
    d = np.diag(np.sqrt(ce * (1 - b) / (band * np.diag(v))))
    m0 = d @ (0.5 * v + 0.5 * np.diag(np.diag(v))) @ d

    def pairs(q):
        return np.add.outer(np.diag(q), np.diag(q)) - 2 * q

    upper = np.triu_indices(m, 1)
    p = 0.5 * (np.outer(1 / (1 - b), b) + np.outer(b, 1 / (1 - b)))[upper]
    mu = pairs(m0)[upper]
    mu = np.maximum(mu, 0.02 * (p @ mu) / p.sum())
    t1 = np.sum(p * pairs(s)[upper] * (np.add.outer(c, c)[upper] / mu) ** 2) / 6
    j = np.diag(b) - np.outer(b, b)
    h = (4 * t1 / np.trace(m0 @ j @ s @ j)) ** (1 / 3) * np.clip(1 - response, 0.05, 1) ** (-2 / 3)
    return h * m0, h


def best_objective(q, a, b, buy, sell):
    """min over p, n >= 0 with a + p - n on the simplex of 1/2 |w-b|_q^2 + buy.p + sell.n."""
    m = len(a)
    scale = max(buy.max(), sell.max())  # objectives of order 1 for the solver's tolerances
    signs = np.hstack([np.eye(m), -np.eye(m)])
    quadratic = signs.T @ q @ signs / scale
    linear = np.concatenate([buy, sell]) / scale + signs.T @ (q @ (a - b)) / scale
    # p, n >= 0 and w >= 0
    sides = np.vstack([-np.eye(2 * m), -signs])
    bounds = np.concatenate([np.zeros(2 * m), a])
    cvxopt.solvers.options.update(show_progress=False, abstol=1e-13, reltol=1e-13, feastol=1e-13, maxiters=200)
    found = cvxopt.solvers.qp(
        cvxopt.matrix(quadratic), cvxopt.matrix(linear), cvxopt.matrix(sides), cvxopt.matrix(bounds),
        cvxopt.matrix(np.concatenate([np.ones(m), -np.ones(m)])[None, :]), cvxopt.matrix(np.zeros(1)))
    constant = 0.5 * (a - b) @ q @ (a - b)
    # The dual objective is a bound that no point can beat; the primal is a point found.
    return found["primal objective"] * scale + constant, found["dual objective"] * scale + constant


def objective(q, a, b, buy, sell, w):
    return 0.5 * (w - b) @ q @ (w - b) + buy @ np.maximum(w - a, 0) + sell @ np.maximum(a - w, 0)


def factor(a, w, buy, sell):
    def left(nu):
        return nu - 1 + buy @ np.maximum(nu * w - a, 0) + sell @ np.maximum(a - nu * w, 0)

    return brentq(left, 0.5, 1.0, xtol=1e-16, rtol=8.9e-16) if left(1.0) > 0 else 1.0


def complaints(question, answer, worst):
    s, a, b, buy, sell = (np.array(question[key]) for key in ("covariation", "held", "wanted", "buy", "sell"))
    w = np.array(answer["weights"])
    out = []
    if w.min() < 0 or abs(w.sum() - 1) > 1e-12:
        out.append(f"weights off the simplex: least {w.min()}, sum - 1 = {w.sum() - 1}")
    q, h = penalty(s, b, 0.5 * (buy + sell), question["response"])
    apart = np.abs(np.array(answer["penalty"]) - q).max() / np.abs(q).max()
    worst["penalty"] = max(worst["penalty"], apart)
    if apart > 1e-10 or abs(answer["h"] / h - 1) > 1e-10:
        out.append(f"penalty differs by {apart} of its largest entry, h by {answer['h'] / h - 1}")
    primal, dual = best_objective(q, a, b, buy, sell)
    mine = objective(q, a, b, buy, sell, w)
    worst["excess"] = max(worst["excess"], mine - primal)
    worst["below"] = max(worst["below"], dual - mine)
    if mine - primal > OBJECTIVE_TOLERANCE:
        out.append(f"objective {mine} is worse than cvxopt's {primal}")
    if dual - mine > OBJECTIVE_TOLERANCE:
        out.append(f"objective {mine} is below cvxopt's bound {dual}")
    if abs(answer["objective"] - mine) > 1e-14:
        out.append(f"stated objective {answer['objective']}, by its definition {mine}")
    cost = -np.log(factor(a, w, buy, sell))
    worst["cost"] = max(worst["cost"], abs(answer["cost"] - cost))
    if abs(answer["cost"] - cost) > 1e-14:
        out.append(f"cost {answer['cost']}, by brentq {cost}")
    growth = 0.5 * (a - b) @ s @ (a - b) - 0.5 * (w - b) @ s @ (w - b)
    if abs(answer["growth_saved"] - growth) > 1e-16 + 1e-9 * abs(growth):
        out.append(f"growth saved {answer['growth_saved']}, by its definition {growth}")
    if answer["horizon_days"] is not None:
        horizon = (0.5 * (a - b) @ q @ (a - b) - 0.5 * (w - b) @ q @ (w - b)) / growth
        payback = cost / growth
        if abs(answer["horizon_days"] / horizon - 1) > 1e-6 or abs(answer["payback_days"] / payback - 1) > 1e-6:
            out.append(f"horizon {answer['horizon_days']} and payback {answer['payback_days']}, "
                       f"by definition {horizon} and {payback}")
        if answer["pays"] != bool(payback <= min(horizon / 1.1, 1260)):
            out.append(f"pays is {answer['pays']} at payback {payback}, horizon {horizon}")
    elif answer["pays"]:
        out.append("pays without a horizon")
    return out


def main():
    if len(sys.argv) != 2:
        print(__doc__.strip().splitlines()[2], file=sys.stderr)
        return 2
    random = np.random.default_rng(20240611)
    questions = [invented(random) for _ in range(PROBLEMS)]
    done = subprocess.run([sys.argv[1]], input=json.dumps(questions), capture_output=True, text=True, check=True)
    answers = json.loads(done.stdout)
    if len(answers) != PROBLEMS:
        print(f"{len(answers)} answers to {PROBLEMS} problems")
        return 1
    worst = dict.fromkeys(("penalty", "excess", "below", "cost"), 0.0)
    wrong = 0
    for number, (question, answer) in enumerate(zip(questions, answers)):
        for complaint in complaints(question, answer, worst):
            print(f"problem {number}: {complaint}")
            wrong += 1
    moved = sum(answer["weights"] != question["held"] for question, answer in zip(questions, answers))
    paid = sum(answer["pays"] for answer in answers)
    print(f"{PROBLEMS} problems, {moved} with a move, {paid} that pay; {wrong} complaints")
    print(f"largest: objective above cvxopt's {worst['excess']:.2e}, below its bound {worst['below']:.2e}, "
          f"penalty {worst['penalty']:.2e} relative, cost {worst['cost']:.2e}")

    unnoticed = 0
    for question, answer in zip(questions, answers):
        # 1e-3 of the way to the wanted weights, or of the whole book where they are reached already.
        spoiled = dict(answer)
        w = np.array(answer["weights"])
        goal = np.array(question["wanted"]) if np.abs(w - question["wanted"]).sum() > 1e-6 else np.eye(len(w))[0]
        spoiled["weights"] = (w + 1e-3 * (goal - w)).tolist()
        if not complaints(question, spoiled, dict.fromkeys(worst, 0.0)):
            unnoticed += 1
    print(f"{unnoticed} of {PROBLEMS} spoiled answers went unnoticed")
    return 1 if wrong or unnoticed or moved < 50 or paid < 50 else 0


if __name__ == "__main__":
    sys.exit(main())
