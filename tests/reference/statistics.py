"""Recomputes statistics of rankassay with SciPy and statsmodels.

Usage: python3 statistics.py CASES.json

The file is written by tests/stats.rs: random cases with the results of the Rust code. The script recomputes them, prints
what differs and leaves with status 1, or prints how many values agree. Needs SciPy 1.7 and statsmodels 0.12 or newer.
"""

import json
import sys

# The folder of this script must not shadow the standard module of the same name, which SciPy's dependencies import.
sys.path = [entry for entry in sys.path if not entry.rstrip("/").endswith("tests/reference")]

import numpy as np
from scipy import special, stats
from statsmodels.stats.contingency_tables import mcnemar
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportion_confint

wrong = []
agreed = 0


def compare(what, found, expected, tolerance=1e-10):
    """Notes a difference beyond `tolerance`, relative to max(|expected|, tolerance)."""
    global agreed
    found, expected = float(found), float(expected)
    if abs(found - expected) <= tolerance * max(abs(expected), tolerance):
        agreed += 1
    else:
        wrong.append(f"{what}: {found!r} instead of {expected!r}")


def wilcoxon(differences, zeros, exact, alternative):
    """Calls SciPy's test under the names its versions use for the same thing."""
    options = {"zero_method": zeros, "correction": False, "alternative": alternative}
    ways = [{"method": "exact"}, {"mode": "exact"}] if exact else [{"method": "approx"}, {"method": "asymptotic"}, {"mode": "approx"}]
    for way in ways:
        try:
            return stats.wilcoxon(differences, **options, **way).pvalue
        except (TypeError, ValueError):
            continue
    raise RuntimeError("this SciPy has no known way to run the signed-rank test")


def check_signed_rank(case, where):
    differences = np.array(case["differences"])
    sizes = np.abs(differences)
    ties = len(np.unique(sizes)) < len(sizes) or bool(np.any(differences == 0))
    if case["exact"] and ties:
        raise RuntimeError(f"{where}: SciPy has no exact law with ties, so that no such case may be written")
    for name, alternative in [("two_sided", "two-sided"), ("less", "less"), ("greater", "greater")]:
        expected = wilcoxon(differences, case["zeros"], case["exact"], alternative)
        compare(f"{where} {name}", case[name], expected)
    pairs = [(a + b) / 2 for i, a in enumerate(differences) for b in differences[: i + 1]]
    compare(f"{where} shift", case["shift"], np.median(pairs), 1e-12)


def check_proportion(case, where):
    k, n, confidence = case["successes"], case["trials"], case["confidence"]
    for method in ["exact", "wilson"]:
        interval = stats.binomtest(k, n).proportion_ci(confidence_level=confidence, method=method)
        compare(f"{where} {method} low", case[method][0], interval.low)
        compare(f"{where} {method} high", case[method][1], interval.high)
    low, high = proportion_confint(k, n, alpha=1 - confidence, method="beta")
    compare(f"{where} beta low", case["exact"][0], low)
    compare(f"{where} beta high", case["exact"][1], high)


def check_mcnemar(case, where):
    b, c = case["gained"], case["lost"]
    if b + c > 0:
        compare(f"{where} two_sided", case["two_sided"], stats.binomtest(b, b + c).pvalue)
        compare(f"{where} gain", case["gain"], stats.binomtest(b, b + c, alternative="greater").pvalue)
        compare(f"{where} loss", case["loss"], stats.binomtest(b, b + c, alternative="less").pvalue)
        compare(f"{where} statsmodels", case["two_sided"], mcnemar([[1, b], [c, 6]], exact=True).pvalue)
        doubled = 2 * stats.binom.cdf(min(b, c), b + c, 0.5) - stats.binom.pmf(b, b + c, 0.5)
        compare(f"{where} mid_p", case["mid_p"], doubled)
    log = (b + c) * np.log(2) + special.betaln(b + 0.5, c + 0.5) - np.log(np.pi)
    # A difference of large numbers: SciPy's own error is about 1e-11 in absolute terms.
    compare(f"{where} log_e_value", 1 + case["log_e_value"] - log, 1)


def check_friedman(case, where):
    blocks = np.array(case["blocks"])
    rows, methods = blocks.shape
    chi_square, p = stats.friedmanchisquare(*blocks.T)
    if np.isnan(chi_square):
        chi_square, p = 0.0, 1.0
    compare(f"{where} chi_square", case["chi_square"], chi_square)
    compare(f"{where} chi_square_p", case["chi_square_p"], p)
    if case["f"] >= 0:
        f = (rows - 1) * chi_square / (rows * (methods - 1) - chi_square)
        compare(f"{where} f", case["f"], f, 1e-9)
        tail = stats.f.sf(f, methods - 1, (methods - 1) * (rows - 1))
        compare(f"{where} f_p", case["f_p"], tail, 1e-9)


def check_power(case, where):
    n, psi = case["pairs"], case["gained"] + case["lost"]
    rare = min(case["gained"], case["lost"]) / psi
    numbers = np.arange(n + 1)
    # The most pairs of the rarer kind at which the test rejects, for each number of discordant pairs.
    bound = stats.binom.ppf(case["alpha"] / 2, numbers, 0.5)
    bound = np.where(2 * stats.binom.cdf(bound, numbers, 0.5) <= case["alpha"], bound, bound - 1)
    rejects = np.where(bound >= 0, stats.binom.cdf(bound, numbers, rare), 0)
    compare(where, case["power"], np.sum(stats.binom.pmf(numbers, n, psi) * rejects), 1e-9)


def check_critical_differences(found):
    if not hasattr(stats, "studentized_range"):
        return
    place = 0
    for k in range(2, 11):
        for level in [0.05, 0.10]:
            # A large number of degrees of freedom stands for infinitely many, which some versions reject.
            q = stats.studentized_range.ppf(1 - level, k, 1e6) / np.sqrt(2)
            q_found = found[place] / np.sqrt(k * (k + 1) / 6)
            # The published table has three decimals.
            compare(f"critical difference {k} {level}", 1 + q_found - q, 1, 1.1e-3)
            place += 1


def main():
    with open(sys.argv[1], encoding="utf-8") as file:
        cases = json.load(file)
    for name, check in [
        ("signed_rank", check_signed_rank),
        ("proportions", check_proportion),
        ("mcnemar", check_mcnemar),
        ("friedman", check_friedman),
        ("power", check_power),
    ]:
        for number, case in enumerate(cases[name]):
            check(case, f"{name} {number}")
    for number, case in enumerate(cases["holm"]):
        adjusted = multipletests(case["p"], method="holm")[1]
        for place, (found, expected) in enumerate(zip(case["adjusted"], adjusted)):
            compare(f"holm {number} {place}", found, expected)
    quantiles = cases["quantiles"]
    for share, found in zip(quantiles["shares"], quantiles["found"]):
        compare(f"quantile {share}", found, np.quantile(quantiles["values"], share), 1e-12)
    check_critical_differences(cases["critical_differences"])
    if wrong:
        print("\n".join(wrong))
        sys.exit(1)
    print(f"{agreed} values agree")


main()
