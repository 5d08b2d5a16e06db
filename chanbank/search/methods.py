"""The design methods that the search tries, each as taps per branch in, prototype out."""

import scipy.signal

from chanbank.prototype.energy import energy_prototype
from chanbank.prototype.equiripple import equiripple_prototype
from chanbank.prototype.lengths import length_estimates
from chanbank.prototype.window import window_prototype
from chanbank.synthesis.dual import dual_prototype
from chanbank.synthesis.pair import prototype_pair

__all__ = ["METHODS", "Bench"]

# A design aims a little inside the ripple limit, so that rounding does not decide.
_INSIDE = 0.98


def _kaiser(channels, branch, edges, ripple):
    passband, stopband = edges
    width = (stopband - passband) / channels
    reach = 7.95 + 14.36 * width * (branch * channels - 1)
    beta = scipy.signal.kaiser_beta(min(max(reach, 21.0), 250.0))
    return window_prototype(
        channels, branch, ("kaiser", float(beta)), cutoff=(passband + stopband) / 2
    )


def _equiripple(slope_db):
    def design(channels, branch, edges, ripple):
        return equiripple_prototype(
            channels,
            branch,
            passband=edges[0],
            stopband=edges[1],
            passband_db=_INSIDE * ripple,
            slope_db=slope_db,
        )

    return design


def _energy(channels, branch, edges, ripple):
    return energy_prototype(
        channels, branch, stopband=edges[1], passband=edges[0], passband_db=_INSIDE * ripple
    )


METHODS = {
    "kaiser": _kaiser,
    "equiripple": _equiripple(0.0),
    "equiripple 6 dB/octave": _equiripple(6.0),
    "energy": _energy,
    "pair": None,
}


class Bench:
    """Designs for one specification, each made once."""

    def __init__(self, specification):
        self.specification = specification
        self._made = {}

    def edges(self, plan):
        """Passband and stopband edge in channel spacings that the limits ask for."""
        names = self.specification.limits.bounds
        half = self.specification.bandwidth(plan) / plan.spacing / 2
        near = 1 - half
        alias = plan.channels / plan.hop - half
        leaks = {"adjacent_leakage_ratio", "adjacent_tone", "total_leakage"}
        wanted = [near] if leaks & set(names) else []
        if {"alias_worst", "alias_mean"} & set(names):
            wanted.append(alias)
        if "alternate_leakage_ratio" in names and not wanted:
            wanted.append(2 - half)
        stopband = min(wanted, default=min(near, alias))
        # Occupied bands that touch leave no transition: let the report say what is lost.
        stopband = max(stopband, half + 0.02)
        return half, min(stopband, 0.499 * plan.channels)

    def ripple(self):
        bound = self.specification.limits.bounds.get("passband_ripple", (None, 0.5))[1]
        return 0.5 if bound is None else bound

    def estimate(self, plan):
        """Taps per branch to start from: the least that any published estimate gives."""
        bounds = self.specification.limits.bounds
        level = 40.0
        for name in ("adjacent_leakage_ratio", "alternate_leakage_ratio"):
            level = max(level, bounds.get(name, (0.0, None))[0] or 0.0)
        for name in ("alias_worst", "alias_mean", "total_leakage", "stopband_level"):
            level = max(level, -(bounds.get(name, (None, 0.0))[1] or 0.0))
        passband, stopband = self.edges(plan)
        taps = length_estimates(
            plan.channels,
            passband=passband,
            stopband=stopband,
            passband_db=self.ripple(),
            stopband_db=level,
        )
        return max(1, round(min(taps["kaiser equiripple"], taps["harris"]) / plan.channels))

    def made(self, method, plan, branch):
        """(prototype, synthesis prototype or None), or None where the method has no design."""
        edges = self.edges(plan)
        pair = self.specification.pair
        hop = plan.hop if pair else None
        key = method, plan.channels, branch, edges, hop
        if key not in self._made:
            try:
                self._made[key] = self._make(method, plan, branch, edges, pair)
            except ValueError:
                self._made[key] = None
        return self._made[key]

    def _make(self, method, plan, branch, edges, pair):
        if method == "pair":
            if branch > 48:
                return None
            return prototype_pair(
                plan, branch, ripple_db=_INSIDE * self.ripple(), passband=edges[0]
            )
        prototype = METHODS[method](plan.channels, branch, edges, self.ripple())
        return prototype, dual_prototype(plan, prototype) if pair else None
