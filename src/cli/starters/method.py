"""An outside method for rankassay: start here and replace `solve`.

Called as `python3 method.py FOLDER`. Reads FOLDER/problem.json and FOLDER/problem.dat-s, writes
FOLDER/answer.json. Needs NumPy alone.

The problem: minimise <C, X> + c'x subject to <A_i, X> + a_i'x = b_i, X = diag(X_1, ..., X_p) positive
semidefinite, x >= 0, and rank X_k <= the rank in problem.json where there is one.
"""

import json
import sys
import time
from pathlib import Path

import numpy as np


def read_problem(path, task):
    """Returns C (one vector), A (a matrix with a row for each constraint) and b.

    Every symmetric block is stored whole, row by row, the nonnegative part after the blocks, so that inner
    products are plain ones. In the file, matrix number 0 is -C.
    """
    orders = [block["order"] for block in task["blocks"]]
    starts = np.cumsum([0] + [n * n for n in orders])
    size = int(starts[-1]) + task["nonnegative"]
    lines = [line for line in path.read_text().splitlines() if line[:1] not in ('"', "*")]
    m = task["constraints"]
    b = np.array([float(word) for word in lines[3].replace(",", " ").split()[:m]])
    rows = np.zeros((m + 1, size))
    for line in lines[4:]:
        words = line.split()
        if len(words) != 5:
            continue
        matrix, block, i, j = (int(word) for word in words[:4])
        value = float(words[4])
        i, j = i - 1, j - 1
        if block > len(orders):  # the nonnegative part
            rows[matrix, starts[-1] + i] += value
            continue
        n, start = orders[block - 1], starts[block - 1]
        rows[matrix, start + i * n + j] += value
        if i != j:
            rows[matrix, start + j * n + i] += value
    return -rows[0], rows[1:], b


def solve(task, C, A, b, deadline):
    """Dual alternating directions for the relaxation (Z. Wen, D. Goldfarb, W. Yin, Mathematical Programming
    Computation 2:203-230, 2010), then projections between the rank set and the equations.

    Returns one factor V for each block (X = VV'), the nonnegative part, the multipliers and the number of
    eigendecompositions.
    """
    orders = [block["order"] for block in task["blocks"]]
    ranks = [block["rank"] or block["order"] for block in task["blocks"]]
    starts = np.cumsum([0] + [n * n for n in orders])
    count = 0

    def split(vector):
        """Returns the parts of a vector in the cone and beyond it: vector = plus - minus."""
        nonlocal count
        plus = np.maximum(vector, 0.0)
        for n, start in zip(orders, starts):
            M = vector[start : start + n * n].reshape(n, n)
            w, Q = np.linalg.eigh((M + M.T) / 2)
            count += 1
            plus[start : start + n * n] = ((Q * np.maximum(w, 0.0)) @ Q.T).ravel()
        return plus, plus - vector

    def truncate(vector):
        """Returns the factors of the nearest blocks of the wanted ranks."""
        nonlocal count
        factors = []
        for n, r, start in zip(orders, ranks, starts):
            M = vector[start : start + n * n].reshape(n, n)
            w, Q = np.linalg.eigh((M + M.T) / 2)
            count += 1
            factors.append(Q[:, -r:] * np.sqrt(np.maximum(w[-r:], 0.0)))
        return factors

    def whole(factors, x):
        return np.concatenate([(V @ V.T).ravel() for V in factors] + [np.maximum(x, 0.0)])

    inverse = np.linalg.pinv(A @ A.T)
    X, S, y, mu = split(A.T @ (inverse @ b))[0], np.zeros_like(C), np.zeros(len(b)), 1.0
    for step in range(20000):
        y = -inverse @ (mu * (A @ X - b) + A @ (S - C))
        S, minus = split(C - A.T @ y - mu * X)
        X = minus / mu
        primal = np.linalg.norm(A @ X - b) / (1 + np.linalg.norm(b))
        dual = np.linalg.norm(A.T @ y + S - C) / (1 + np.linalg.norm(C))
        if max(primal, dual) < 1e-9 or time.monotonic() > deadline:
            break
        if step % 50 == 49 and not 0.1 < primal / max(dual, 1e-300) < 10:
            mu *= 1.5 if primal > dual else 1 / 1.5
    for _ in range(200):
        factors = truncate(X)
        R = whole(factors, X[starts[-1] :])
        X = R - A.T @ (inverse @ (A @ R - b))
        if np.linalg.norm(A @ R - b) < 1e-12 * (1 + np.linalg.norm(b)) or time.monotonic() > deadline:
            break
    return factors, np.maximum(X[starts[-1] :], 0.0), y, count


def main():
    start = time.monotonic()
    folder = Path(sys.argv[1])
    task = json.loads((folder / "problem.json").read_text())
    C, A, b = read_problem(folder / task["problem"], task)
    np.random.seed(task["seed"] % 2**32)  # everything random starts from the trial's seed
    factors, x, y, count = solve(task, C, A, b, start + 0.8 * task["wall_s"])
    answer = {
        "version": 1,
        "blocks": [{"factor": V.tolist()} for V in factors],
        "nonnegative": x.tolist(),
        "multipliers": y.tolist(),
        "stop": "converged",
        "effort": {"eigendecompositions": count},
    }
    (folder / task["answer"]).write_text(json.dumps(answer))


if __name__ == "__main__":
    main()
