"""Levels between mixtures of Gaussians by a search of another kind than the library's, and random problems to compare.

The search knows where something can happen: with any pair of terms, only where their log ratio lies between -40 and 40,
and a Gaussian pair tells the ends of that in closed form. Those landmarks, with others around each mean, are divided
finely, the sign of the gap is taken at each point from exact log ratios in extended precision, places where the gap
comes near 0 without changing sign are looked at more closely, and every root is settled by mpmath at 50 digits.

    python tests/reference/levels.py --count 10000
"""

import argparse
import dataclasses
import itertools
import sys
import time

import mpmath
import numpy as np

import limen as lm

LONG = np.longdouble
OFFSETS = LONG([-40, -15, -6, -2.5, -1, -0.3, 0, 0.3, 1, 2.5, 6, 15, 40])
AROUND = np.concatenate([[0], np.geomspace(1e-3, 60, 28)]).astype(LONG)
BETWEEN = np.arange(6, dtype=LONG) / 6
EPS = 2.0**-52
DIGITS = 50


@dataclasses.dataclass
class Problem:
    """mixtures[state] = (weights, means, sds)."""

    priors: list
    mixtures: list
    costs: np.ndarray | None = None

    def states(self):
        laws = [lm.mixture(w, [lm.gaussian(m, s) for m, s in zip(means, sds)]) for w, means, sds in self.mixtures]
        return lm.States({f"s{k}": law for k, law in enumerate(laws)}, priors=self.priors)

    def rule(self):
        if self.costs is None:
            return lm.bayes(self.states())
        return lm.bayes(self.states(), self.costs, decisions=[f"d{k}" for k in range(len(self.costs))])

    def cost(self):
        k = len(self.priors)
        return 1.0 - np.eye(k) if self.costs is None else np.asarray(self.costs, float)


class Gap:
    """sum_i c_i p_i f_i(x), as positive terms against negative ones."""

    def __init__(self, problem, coefficients):
        mean, sd, weight, sign = [], [], [], []
        total = sum(map(LONG, problem.priors))
        for c, prior, (w, means, sds) in zip(coefficients, problem.priors, problem.mixtures):
            shares = sum(map(LONG, w))
            for share, m, s in zip(w, means, sds):
                if c * prior * share != 0:
                    mean.append(m)
                    sd.append(s)
                    weight.append(abs(LONG(c)) * LONG(prior) / total * LONG(share) / shares)
                    sign.append(c > 0)
        self.mean, self.sd, self.weight = LONG(mean), LONG(sd), LONG(weight)
        self.positive = np.array(sign, bool)
        with mpmath.workdps(DIGITS):
            self.exact = [(mpmath.mpf(m), mpmath.mpf(s), exact(w) / mpmath.mpf(s), p)
                          for m, s, w, p in zip(mean, sd, weight, sign)]

    def one_signed(self):
        return self.positive.all() or not self.positive.any()

    def ratio(self, a, b, x):
        """log of term a over term b: products of differences, so that nothing cancels that the parameters keep."""
        sa, sb, t = self.sd[a], self.sd[b], x - self.mean[b]
        apart = self.mean[a] - self.mean[b]
        less, more = t * (sa - sb) + sb * apart, t * (sa + sb) - sb * apart
        return np.log(self.weight[a] * sb / (self.weight[b] * sa)) + less * more / (2 * (sa * sb) ** 2)

    def value(self, x):
        """log of the positive sum over the negative one, at each x."""
        x = np.asarray(x, LONG)
        size = np.log(self.weight / self.sd)[:, None] - ((x - self.mean[:, None]) / self.sd[:, None]) ** 2 / 2
        every, largest = np.arange(len(self.mean))[:, None], size.argmax(0)
        parts = self.ratio(every, largest, x)
        for _ in self.mean:     # where the sizes are huge, rounding may have hidden which is largest; ratios know
            wrong = parts.max(0) > 1
            if not wrong.any():
                break
            largest[wrong] = parts[:, wrong].argmax(0)
            parts[:, wrong] = self.ratio(every, largest[wrong], x[wrong])
        with np.errstate(under="ignore"):
            return log_sum(parts[self.positive]) - log_sum(parts[~self.positive])

    def exactly(self, x):
        """The same and its slope, at 50 digits; and the size of what the library may lose there by rounding."""
        terms = [(mpmath.log(h) - (x - m) ** 2 / (2 * s * s), -(x - m) / s / s, m, s, h, p)
                 for m, s, h, p in self.exact]
        sums, slopes, size = [], [], 1
        for side in (True, False):
            ours = [t for t in terms if t[5] == side]
            top = max(ours, key=lambda t: t[0])
            shares = [mpmath.exp(t[0] - top[0]) for t in ours]
            total = sum(shares)
            sums.append(top[0] + mpmath.log(total))
            slopes.append(sum(share * t[1] for share, t in zip(shares, ours)) / total)
            size += abs(mpmath.log(top[4])) + abs(top[0] - mpmath.log(top[4]))
        return sums[0] - sums[1], slopes[0] - slopes[1], 8 * EPS * size

    def landmarks(self):
        marks = [(self.mean[:, None] + s * self.sd[:, None] * AROUND).ravel() for s in (-1, 1)]
        for a, b in itertools.combinations(range(len(self.mean)), 2):
            # t^2 (sa - sb)(sa + sb) - 2 t ... : ratio(t) = constant + (A t^2 + 2 B t - C) / 2
            sa, sb, apart = self.sd[a], self.sd[b], self.mean[a] - self.mean[b]
            quad, half = (sa - sb) * (sa + sb) / (sa * sb) ** 2, apart / sa**2
            free = 2 * (np.log(self.weight[a] * sb / (self.weight[b] * sa)) - OFFSETS) - (apart / sa) ** 2
            if quad == 0:
                if half != 0:
                    marks.append(self.mean[b] - free / (2 * half))
                continue
            root = half * half - quad * free
            root = np.sqrt(np.where(root > 0, root, 0))     # where there is none, the vertex is as good
            q = -(half + np.copysign(root, half))
            with np.errstate(divide="ignore", invalid="ignore"):
                marks += [self.mean[b] + q / quad, self.mean[b] + free / q, self.mean[b] - half[None] / quad]
        marks = np.concatenate(marks)
        marks = np.unique(marks[np.isfinite(marks) & (np.abs(marks) < np.finfo(float).max)])
        far = marks[-1] - marks[0] + np.abs(marks).max() * LONG(1e-15)    # the outermost may be roots themselves
        marks = np.concatenate([[marks[0] - far], marks, [marks[-1] + far]])
        return np.unique(np.append((marks[:-1, None] + np.diff(marks)[:, None] * BETWEEN).ravel(), marks[-1]))

    def brackets(self):
        x = self.landmarks()
        h = self.value(x)
        found = [(x[k], x[k + 1]) for k in np.flatnonzero((h[:-1] >= 0) != (h[1:] >= 0))]
        size, jump = np.abs(h), np.abs(np.diff(h))
        near = (size[1:-1] <= size[:-2]) & (size[1:-1] <= size[2:]) & (size[1:-1] <= np.maximum(jump[1:], jump[:-1]))
        near &= ((h[:-2] >= 0) == (h[1:-1] >= 0)) & ((h[1:-1] >= 0) == (h[2:] >= 0))
        for k in np.flatnonzero(near) + 1:
            found += self.closer(x[k - 1], x[k + 1])
        return sorted(found)

    def closer(self, low, high):
        """Brackets of a pair of roots around the place where the gap comes nearest to 0, if it gets there."""
        for _ in range(16):
            x = np.unique(low + (high - low) * np.arange(33, dtype=LONG) / 32)
            if len(x) < 3:
                break
            h = self.value(x)
            if (h[0] >= 0) != (h[-1] >= 0) or ((h >= 0) != (h[0] >= 0)).any():
                return [(x[k], x[k + 1]) for k in np.flatnonzero((h[:-1] >= 0) != (h[1:] >= 0))]
            k = min(max(int(np.abs(h).argmin()), 1), len(x) - 2)
            if abs(h[k]) > max(abs(h[k + 1] - h[k]), abs(h[k] - h[k - 1])):
                break
            low, high = x[k - 1], x[k + 1]
        return []

    def roots(self):
        """(first double at or above the root, error allowed) of each change of sign."""
        found = self.brackets()
        if not found:
            return []
        low, high = (LONG(side) for side in zip(*found))
        rises = self.value(low) < 0
        steps = np.arange(33, dtype=LONG)[:, None] / 32
        for _ in range(14):
            x = low + (high - low) * steps
            x[-1] = high
            after = (self.value(x.ravel()).reshape(x.shape) >= 0) == rises
            k = np.maximum(after.argmax(0), 1)
            low, high = x[k - 1, np.arange(len(k))], x[k, np.arange(len(k))]
        settled = [self.settle(*sides) for sides in zip(low, high, found, rises)]
        return [root for root in settled if root]

    def settle(self, low, high, outer, rises):
        """Newton's steps at 50 digits, halving where they leave the bracket."""
        with mpmath.workdps(DIGITS):
            low, high = exact(low), exact(high)
            room = max(abs(low), abs(high)) * exact(np.finfo(LONG).eps)     # an end may be the root itself
            for attempt in range(45):
                if (self.exactly(low)[0] < 0) == rises and (self.exactly(high)[0] >= 0) == rises:
                    break
                low, high = (low, high) if attempt else map(exact, outer)
                low, high, room = low - room, high + room, 2 * room
            else:     # the search saw its own rounding, which is far below that of doubles
                assert abs(self.exactly(low)[0]) < EPS / 16, "mpmath does not confirm a root of the search"
                return None
            x = (low + high) / 2
            while True:
                h, slope, noise = self.exactly(x)
                low, high = (x, high) if (h < 0) == rises else (low, x)
                step = h / slope if slope else high - low
                if h == 0 or abs(step) < abs(x) * mpmath.mpf(10) ** -25:
                    break
                x = x - step if low < x - step < high else (low + high) / 2
            level = float(x)
            level = level if level >= x else np.nextafter(level, np.inf)
            return float(level), float(4 * EPS * abs(x) + noise / abs(slope)) if slope else np.inf


def exact(x):
    """A longdouble as an mpf."""
    mantissa, exponent = np.frexp(x)
    high = float(mantissa)
    return mpmath.ldexp(mpmath.mpf(high) + mpmath.mpf(float(mantissa - LONG(high))), int(exponent))


def log_sum(parts):
    top = parts.max(0)
    return top + np.log(np.exp(parts - top).sum(0))


def levels(problem):
    """(levels, errors allowed, decisions) and the gaps of all pairs of decisions."""
    cost = problem.cost()
    gaps = {(d, e): Gap(problem, cost[e] - cost[d]) for d, e in itertools.combinations(range(len(cost)), 2)}
    roots = {}
    for gap in gaps.values():
        if len(gap.mean) and not gap.one_signed():
            roots.update(gap.roots())     # of two roots between the same doubles, either will do
    roots = sorted(roots.items())
    at = np.array([x for x, _ in roots])
    middles = readings_between(at)
    best = np.zeros(len(middles), int)
    for e in range(1, len(cost)):
        for k, x in enumerate(middles):
            gap = gaps[best[k], e]
            if len(gap.mean):
                worse = not gap.positive.any() if gap.one_signed() else gap.value(LONG([x]))[0] < 0
                best[k] = e if worse else best[k]
    kept = [k for k in range(len(roots)) if best[k] != best[k + 1]]
    return [roots[k] for k in kept], [int(best[0]), *(int(best[k + 1]) for k in kept)], gaps


def compare(problem):
    """(missed, invented, levels in all, whether all decisions agree): the library against the search."""
    wanted, decisions, gaps = levels(problem)
    rule = problem.rule()
    found, missed = list(rule.levels), []
    agree = rule.decisions.tolist() == decisions
    for x, room in wanted:
        nearest = min(found, key=lambda y: abs(y - x), default=np.inf)
        if abs(nearest - x) <= room:
            found.remove(nearest)
        else:
            missed.append(x)
    if (missed or found or not agree) and alike(rule, [x for x, _ in wanted], decisions, gaps):
        return [], [], len(wanted), True
    return missed, found, len(wanted), agree


def alike(rule, other_levels, other_decisions, gaps):
    """Whether the gap is within rounding wherever the two decide differently: a touch, or laws that nearly tie."""
    at = np.unique(np.concatenate([rule.levels, other_levels]))
    looks = readings_between(at)
    ours, theirs = rule(looks), np.array(other_decisions)[np.searchsorted(other_levels, looks, side="right")]
    with mpmath.workdps(DIGITS):
        for x, pair in zip(looks, np.sort([ours, theirs], axis=0).T):
            if pair[0] != pair[1]:
                gap = gaps[tuple(pair.tolist())]
                if gap.one_signed():
                    return False
                h, _, noise = gap.exactly(mpmath.mpf(float(x)))
                if abs(h) > noise:
                    return False
    return True


def readings_between(levels):
    """A reading of each interval."""
    at = np.asarray(levels, float)
    if not len(at):
        return np.zeros(1)
    middles = np.clip((at[1:] + at[:-1]) / 2, at[:-1], np.nextafter(at[1:], -np.inf))
    return np.concatenate([[at[0] - 1 - abs(at[0])], middles, [at[-1] + 1 + abs(at[-1])]])


def random_problem(rng):
    """2 states mostly, 3 or 4 at times and then with costs at times; sds 1e-6 to 1e2 and weights from 1e-9."""
    count = int(rng.choice([2, 2, 2, 2, 2, 2, 3, 4]))
    spread = 10 ** rng.uniform(-1, 1.5)
    mixtures = []
    for _ in range(count):
        n = int(rng.integers(2, 6))
        weights = 10 ** rng.uniform(-9, 0, n)
        mixtures.append(((weights / weights.sum()).tolist(), (spread * rng.normal(size=n)).tolist(),
                         (10 ** rng.uniform(-6, 2, n)).tolist()))
    priors = 10 ** rng.uniform(-4, 0, count)
    costs = None
    if count > 2 and rng.random() < 0.5:
        costs = np.round(10 ** rng.uniform(-2, 2, (count, count)), 3)
        np.fill_diagonal(costs, 0)
    return Problem((priors / priors.sum()).tolist(), mixtures, costs)


def awkward_problem(rng):
    """Shared means, sds equal or a hair apart, combs, spikes, far origins, tiny and huge units, priors of 1e-200."""
    count = int(rng.choice([2, 2, 2, 3]))
    unit, origin = 10 ** rng.choice([0.0, 0.0, -30.0, 30.0, -100.0]), rng.choice([0.0, 0.0, 1.0, -1e6, 1e9])
    means = rng.normal(size=4) * 10 ** rng.uniform(-2, 1) + origin
    sds = 10 ** rng.uniform(-1, 1, 3)
    sds = np.concatenate([sds, sds * (1 + 10 ** rng.uniform(-12, -2, 3)), 10 ** rng.uniform(-10, -3, 2)])
    mixtures = []
    for k in range(count):
        if rng.random() < 0.15:
            n = int(rng.integers(3, 13))
            step, weights = 10 ** rng.uniform(-1, 1), np.ones(n)
            laws = origin + step * (np.arange(n) + k / count), np.full(n, step * 10 ** rng.uniform(-2, 0.2))
        else:
            n = int(rng.integers(1, 5))
            weights = 10 ** rng.uniform(*rng.choice([(-9, 0), (-0.3, 0), (-60, 0)]), n)
            laws = rng.choice(means, n), rng.choice(sds, n)
        mixtures.append(((weights / weights.sum()).tolist(), *((law * unit).tolist() for law in laws)))
    priors = 10 ** rng.uniform(*rng.choice([(-2, 0), (0, 0), (-200, 0)]), count)
    return Problem((priors / priors.sum()).tolist(), mixtures)


def main():
    parse = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parse.add_argument("--count", type=int, default=1000, help="how many problems")
    parse.add_argument("--first", type=int, default=0, help="seed of the first; each problem has its own")
    parse.add_argument("--awkward", action="store_true", help="hard cases made on purpose")
    asked = parse.parse_args()
    make = awkward_problem if asked.awkward else random_problem
    began, spent, all_levels, missed, invented, unlike, words = time.perf_counter(), 0.0, 0, 0, 0, 0, {}
    for seed in range(asked.first, asked.first + asked.count):
        problem = make(np.random.default_rng(seed))
        lost, extra, count, agree = compare(problem)
        start = time.perf_counter()
        search = problem.rule().search
        spent += time.perf_counter() - start
        words[search] = words.get(search, 0) + 1
        all_levels, missed, invented = all_levels + count, missed + len(lost), invented + len(extra)
        unlike += not agree
        if lost or extra or not agree:
            print(f"problem {seed}: missed {lost}, invented {extra}, decisions {'agree' if agree else 'differ'}",
                  flush=True)
        if sys.stderr.isatty() or seed % 500 == 499:
            print(f"{seed + 1 - asked.first} problems, {time.perf_counter() - began:.0f} s", file=sys.stderr)
    print(f"{asked.count} problems, {all_levels} levels: {missed} missed, {invented} invented, {unlike} with other "
          f"decisions; {time.perf_counter() - began:.0f} s, of which the library {spent:.1f} s")
    for search, count in sorted(words.items(), key=lambda item: -item[1]):
        print(f"{count:6d} {search}")
    return missed + invented + unlike > 0


if __name__ == "__main__":
    sys.exit(main())
