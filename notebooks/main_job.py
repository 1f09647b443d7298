"""The main job on real readings: fit each state, design the rule, predict its errors, count them, hand it over.

The recordings are timed loads from memory (see captures/README.md): skewed, heavy-tailed, on a lattice of 26 ticks, and
drifting. Each state is known, so that what is predicted can be held against what happens.
"""

import sys
from pathlib import Path

import numpy as np

import limen as lm

HERE = Path(__file__).resolve().parent
OUT = HERE / "out"
BLOCK = 1000    # readings; neighbours share whatever the machine was doing, so whole blocks go to one side


def main():
    OUT.mkdir(exist_ok=True)
    for name in ("latency_two", "latency_four"):
        with np.load(HERE / "captures" / f"{name}.npz") as capture:
            job(name, capture["readings"], capture["state"])


def job(name, readings, truth):
    """Everything for one recording."""
    print(f"\n=== {name}: {len(readings):,} readings in {truth.max() + 1} known states\n")
    even = np.arange(len(readings)) // BLOCK % 2 == 0
    first = np.arange(len(readings)) < len(readings) // 2

    states = learn(readings[even], truth[even])
    rule = lm.bayes(states)
    describe(rule)
    print("Even blocks to fit, odd blocks to count:")
    tally = compare(rule, states, readings[~even], truth[~even])
    show_matrices(rule, rule.assess(states).transition, tally.counts)
    floor = least_possible(readings[~even], truth[~even])
    ratio = error_rate(tally.counts) / floor
    print(f"  the least that any rule could reach on these readings is {floor:.5f}; measured is {ratio:.3f} of that\n")

    bell = lm.bayes(learn(readings[even], truth[even], gaussian))
    cost = error_rate(bell.tally(readings[~even], truth[~even]).counts)
    print(f"A rule from plain Gaussian fits would have cost {cost:.5f}: "
          f"{cost / error_rate(tally.counts):.2f} times the errors, with {len(bell.levels)} levels.\n")

    print("First half to fit, second half to count:")
    early = learn(readings[first], truth[first])
    early_rule = lm.bayes(early)
    compare(early_rule, early, readings[~first], truth[~first])
    later = ~first & ~even
    aged = error_rate(early_rule.tally(readings[later], truth[later]).counts)
    fresh = error_rate(rule.tally(readings[later], truth[later]).counts)
    print(f"  drift costs {100 * (aged / fresh - 1):.1f} % more errors: {aged:.5f} on the odd blocks of the second "
          f"half, against {fresh:.5f} fitted throughout\n")

    hand_over(name, rule, states, tally)


def learn(readings, truth, fit=None):
    """The states, each with the density fitted to its own readings, and their priors as they occurred."""
    fit = fit or lm.from_readings
    count = np.bincount(truth)
    densities = {f"set {k}": fit(readings[truth == k]) for k in range(len(count))}
    return lm.States(densities, priors=count / count.sum())


def gaussian(readings):
    """The density that a bell curve through mean and standard deviation would be."""
    return lm.gaussian(readings.mean(), readings.std())


def describe(rule):
    print(f"Rule: {len(rule.levels)} levels (search: {rule.search})")
    edges = ["-inf", *(f"{level:.2f}" for level in rule.levels), "inf"]
    for left, right, decision in zip(edges[:-1], edges[1:], rule.decisions):
        print(f"  {left:>12} <= reading < {right:>12}   {rule.names[decision]}")
    print()


def compare(rule, states, readings, truth):
    """Predicted and measured error rate side by side; returns the tally."""
    predicted = rule.assess(states).error_rate
    tally = rule.tally(readings, truth)
    trials, right = tally.counts.sum(), np.trace(tally.counts)
    low, high = lm.error_bounds(int(trials - right), int(trials))
    measured = error_rate(tally.counts)
    print(f"  error rate predicted {predicted:.5f}   measured {measured:.5f}, exact 95 % bounds [{low:.5f}, {high:.5f}]"
          f"   predicted / measured {predicted / measured:.3f}")
    return tally


def error_rate(counts):
    return 1 - np.trace(counts) / counts.sum()


def least_possible(readings, truth):
    """Error rate of the best rule for the very readings it is counted on: each value goes to its commonest state."""
    _, value = np.unique(readings, return_inverse=True)
    counts = np.zeros((value.max() + 1, truth.max() + 1), dtype=np.int64)
    np.add.at(counts, (value, truth), 1)
    return 1 - counts.max(axis=1).sum() / len(readings)


def show_matrices(rule, predicted, counts):
    """The transition matrix, predicted, and as counted, by column."""
    print(f"  {'':>10} | {'predicted':<{10 * len(rule.names)}}  | counted, when the state is")
    print(f"  {'declared':>10} | " + "".join(f"{name:>10}" for name in rule.names) + "  | "
          + "".join(f"{name:>10}" for name in rule.names))
    for name, row, counted in zip(rule.names, predicted, counts / counts.sum(axis=0)):
        print(f"  {name:>10} | " + "".join(f"{p:10.5f}" for p in row) + "  | " + "".join(f"{p:10.5f}" for p in counted))


def hand_over(name, rule, states, tally):
    """The rule as a file, as a C header, as a picture, and as a page for the review."""
    from matplotlib.figure import Figure

    rule.save(OUT / f"{name}.json")
    if not np.array_equal(lm.load(OUT / f"{name}.json").levels, rule.levels):
        sys.exit(f"{name}.json does not give back the rule")
    (OUT / f"{name}.h").write_text(rule.to_c_header(name), encoding="utf-8")
    figure = Figure(figsize=(10, 8), layout="constrained")
    top, bottom = figure.subplots(2)
    lm.plot.rule(rule, states, ax=top)
    lm.plot.rule(rule, states, log=True, ax=bottom)
    top.set_title(f"{name}: densities, levels and error regions")
    figure.savefig(OUT / f"{name}.png", dpi=120)
    lm.report(OUT / f"{name}.html", rule, states, tally, title=f"Decision levels for {name}")
    print(f"Written to notebooks/out: {name}.json, {name}.h, {name}.png, {name}.html")


if __name__ == "__main__":
    main()
