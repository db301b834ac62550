#!/usr/bin/env python3
"""Six families fitted to a million right-censored waits: outwait beside lifelines and scipy.

    cargo build --release --example six_fits
    python benches/peers/fits_1m.py [--waits 1000000] [--runs 1]

Every log-likelihood is that of the million waits as they are, at the estimate which that side found. Time is the fit's
alone: nobody's start, import or reading of the file. Ours includes counting the waits into a tally, once for all six.
lifelines has no gamma and no Lomax law; scipy stands in for those.
"""

import argparse
import logging
import os
import subprocess
import tempfile
import time
import warnings

import numpy
from lifelines import ExponentialFitter, LogLogisticFitter, LogNormalFitter, WeibullFitter
from scipy import stats

warnings.filterwarnings("ignore")
logging.disable(logging.WARNING)


def sample(waits):
    """Lognormal with a sigma of 1, cut at its 90% point."""
    ages = 0.02 * numpy.exp(numpy.random.default_rng(7).standard_normal(waits))
    cut = 0.02 * numpy.exp(1.2815515655446004)
    return numpy.minimum(ages, cut), ages <= cut


def lifelines_fit(fitter, ages, ended):
    start = time.perf_counter()
    found = fitter.fit(ages, ended)
    return time.perf_counter() - start, found.log_likelihood_


def scipy_fit(law, ages, ended):
    data = stats.CensoredData.right_censored(ages, ~ended)
    start = time.perf_counter()
    shape, _, scale = law.fit(data, floc=0)
    seconds = time.perf_counter() - start
    frozen = law(shape, loc=0, scale=scale)
    return seconds, frozen.logpdf(ages[ended]).sum() + frozen.logsf(ages[~ended]).sum()


def ours(binary, ages, ended):
    with tempfile.NamedTemporaryFile(suffix=".f64") as file:
        numpy.where(ended, ages, -ages).astype("<f8").tofile(file.name)
        lines = subprocess.run([binary, file.name], check=True, capture_output=True, text=True).stdout.split("\n")
    tally = float(lines[0].split()[1])
    return tally, [(float(seconds), float(likelihood)) for _, seconds, likelihood in map(str.split, lines[1:7])]


def main():
    parse = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parse.add_argument("--waits", type=int, default=1_000_000)
    parse.add_argument("--runs", type=int, default=1, help="runs of the peers; ours runs five times")
    parse.add_argument("--only", help="one family")
    parse.add_argument("--binary", default="target/release/examples/six_fits")
    args = parse.parse_args()
    ages, ended = sample(args.waits)
    peers = [
        ("exponential", "lifelines", lambda: lifelines_fit(ExponentialFitter(), ages, ended)),
        ("weibull", "lifelines", lambda: lifelines_fit(WeibullFitter(), ages, ended)),
        ("gamma", "scipy", lambda: scipy_fit(stats.gamma, ages, ended)),
        ("lognormal", "lifelines", lambda: lifelines_fit(LogNormalFitter(), ages, ended)),
        ("log-logistic", "lifelines", lambda: lifelines_fit(LogLogisticFitter(), ages, ended)),
        ("lomax", "scipy", lambda: scipy_fit(stats.lomax, ages, ended)),
    ]
    runs = [ours(args.binary, ages, ended) for _ in range(5)]
    tally = min(tally for tally, _ in runs)
    total_ours, total_theirs = tally, 0.0
    print(f"{args.waits} waits, {int((~ended).sum())} censored, {os.cpu_count()} cores; least of 5 and of {args.runs} runs")
    print(f"{'counting into a tally':24} {tally:9.4f} s")
    print(f"{'family':12} {'peer':10} {'outwait s':>10} {'peer s':>9} {'outwait lnL':>16} {'peer lnL':>16} {'ours above':>11}")
    for i, (family, peer, run) in enumerate(peers):
        if args.only not in (None, family):
            continue
        seconds = min(fits[i][0] for _, fits in runs)
        likelihood = runs[0][1][i][1]
        theirs = [run() for _ in range(args.runs)]
        their_seconds, their_likelihood = min(s for s, _ in theirs), theirs[0][1]
        total_ours, total_theirs = total_ours + seconds, total_theirs + their_seconds
        print(
            f"{family:12} {peer:10} {seconds:10.4f} {their_seconds:9.2f} {likelihood:16.3f} {their_likelihood:16.3f}"
            f" {likelihood - their_likelihood:11.3f}",
            flush=True,
        )
    print(f"together: {total_ours:.4f} s with the tally, peers {total_theirs:.1f} s: {total_theirs / total_ours:.0f} times")


if __name__ == "__main__":
    main()
