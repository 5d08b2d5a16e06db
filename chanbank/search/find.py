"""The search: every candidate designed, reported and held against the specification."""

from chanbank._blas import one_blas_thread
from chanbank._checks import Boolean, Instance, Optional, OwnCheck, checked, wrong_type, wrong_value
from chanbank.metrics.cost import bank_cost, state_bytes
from chanbank.metrics.formula import bank_report
from chanbank.search.design import judged
from chanbank.search.methods import METHODS, Bench
from chanbank.search.result import DesignSearch
from chanbank.search.specification import Specification

__all__ = ["find_designs"]

# Taps per branch beyond which a candidate is given up: latency and cost are then out of hand.
_MOST_BRANCH = 96

# Lengths above the least that works, tried for their margin.
_LONGER = (1, 2, 4)

_PROGRESS_ABOVE = 1024

_METHODS = "None or a non-empty sequence of " + ", ".join(repr(name) for name in METHODS)


@checked(
    specification=Instance(Specification),
    methods=OwnCheck(_METHODS, ("kaiser", TypeError), (["no such"], ValueError), ([], ValueError)),
    progress=Optional(Boolean()),
)
@one_blas_thread
def find_designs(specification, *, methods=None, progress=None):
    """The designs that meet a specification, none of them beaten in every respect.

    For every number of channels and hop that the specification leaves open and every method
    ("kaiser", "equiripple", "equiripple 6 dB/octave", "energy"; "pair" as well where a
    reconstruction error is limited), the least taps per branch whose `bank_report` keeps every
    limit, started from the published length estimates and decided by the report alone, and a few
    more taps for their margin. Of the designs that pass, those stay that no other one beats or
    equals in cost, latency, memory and margin together.

    Parameters
    ----------
    specification : Specification
    methods : sequence of str, optional
        Only these methods. By default all.
    progress : bool, optional
        Show a progress bar. By default above 1024 channels and for reconstructing pairs.

    Returns
    -------
    DesignSearch
        Its ``designs``, cheapest first, everything that was tried, the reason why the next
        cheaper one fails or, without designs, which limit must give and by how much. Prints as a
        table. The same specification gives the same result.

    Raises
    ------
    TypeError, ValueError
        Not a specification; a method that does not exist.

    References
    ----------
    J. F. Kaiser 1974 and f. j. harris 2004 (the lengths to start from); 3GPP TS 36.104, clause
    6.6.2 (what neighbour rejection means, here on the receiver's side).

    Examples
    --------
    >>> from chanbank.search.find import find_designs
    >>> from chanbank.search.specification import Specification
    >>> spec = Specification(800e3, 25e3, occupied_bandwidth=14e3, neighbour_rejection=60)
    >>> found = find_designs(spec)
    >>> best = found.designs[0]
    >>> best.plan.channels, best.report["adjacent_leakage_ratio"].worst > 60
    (32, True)
    """
    chosen = _chosen(methods, specification)
    bench = Bench(specification)
    jobs = [
        (plan, method)
        for channels in specification.channel_counts
        for plan in specification.plans(channels)
        for method in chosen
    ]
    shown = progress
    if shown is None:
        shown = max(specification.channel_counts) > _PROGRESS_ABOVE or specification.pair
    tried, hints = [], {}
    for plan, method in _with_progress(jobs, shown):
        start = hints.get((method, plan.channels)) or bench.estimate(plan)
        hinted = (method, plan.channels) in hints
        climb = _climb_pairs if method == "pair" else _climb
        designs, least = climb(bench, plan, method, start, hinted=hinted)
        if least:
            hints[method, plan.channels] = least
        tried += designs
    return DesignSearch(specification, tried)


def _chosen(methods, specification):
    if methods is None:
        return [name for name in METHODS if name != "pair" or specification.pair]
    if isinstance(methods, str) or not hasattr(methods, "__iter__"):
        raise wrong_type("methods", _METHODS, methods)
    methods = list(methods)
    if not methods or any(name not in METHODS for name in methods):
        raise wrong_value("methods", _METHODS, methods)
    return methods


def _with_progress(jobs, shown):
    if not shown:
        return jobs
    from tqdm import tqdm

    return tqdm(jobs, desc="designs", unit="bank")


def _climb(bench, plan, method, start, *, hinted):
    """Candidates of one plan and method, and the least taps per branch that keep every level.

    Limits on cost, latency and memory only get worse with length, the others only better (nearly):
    the two ends are searched apart, so that a conflict between them shows on both sides.
    """
    known = {}

    def at(branch):
        if branch not in known:
            known[branch] = _judged(bench, plan, method, branch)
        return known[branch]

    def good(branch):
        design = at(branch)
        return design is not None and all(line.name in _PAID for line in design.failures)

    affordable = _affordable(bench.specification, plan)
    ceiling = min(_MOST_BRANCH, 2 * start + 8)
    branch = min(max(1, start), ceiling)
    least = None
    if good(branch):
        while branch > 1 and good(branch - 1):
            branch -= 1
        least = branch
    else:
        while branch < ceiling:
            branch += 1 if branch - start < 4 else 2
            branch = min(branch, ceiling)
            if good(branch):
                while good(branch - 1):
                    branch -= 1
                least = branch
                break
    if least and not hinted:
        for extra in _LONGER:
            if least + extra <= affordable:
                at(least + extra)
    if affordable < (least or ceiling):
        at(max(1, affordable))
    return [design for design in known.values() if design is not None], least


def _climb_pairs(bench, plan, method, start, *, hinted):
    """The same for jointly designed pairs, of which each takes a second: a short ladder."""
    found = []
    for branch in _PAIR_BRANCHES:
        design = _judged(bench, plan, method, branch)
        if design is None:
            continue
        found.append(design)
        if all(line.name in _PAID for line in design.failures):
            return found, branch
    return found, None


_PAIR_BRANCHES = (4, 6, 8, 10, 12, 16)

_PAID = {
    "latency",
    "latency_seconds",
    "multiplications",
    "additions",
    "state",
    "delay_spread",
}


def _affordable(specification, plan):
    """The most taps per branch whose latency, arithmetic and memory are within their limits."""
    bounds = {name: high for name, (_, high) in specification.limits.bounds.items()}
    banks = 2 if specification.pair else 1

    def within(branch):
        length = branch * plan.channels
        cost = bank_cost(plan, length)
        paid = {
            "latency_seconds": banks * (length - 1) / 2 / plan.sample_rate,
            "latency": banks * (length - 1) / 2,
            "multiplications": banks * cost.multiplications,
            "additions": banks * cost.additions,
            "state": state_bytes(plan, length, length if banks == 2 else None, "complex64"),
        }
        limits = [(paid[name], bounds.get(name)) for name in paid]
        return all(limit is None or value <= limit for value, limit in limits)

    return max((b for b in range(1, _MOST_BRANCH + 1) if within(b)), default=0)


def _judged(bench, plan, method, branch):
    made = bench.made(method, plan, branch)
    if made is None:
        return None
    prototype, synthesis = made
    report = bank_report(
        plan,
        prototype,
        synthesis,
        occupied_bandwidth=bench.specification.bandwidth(plan),
    )
    return judged(method, plan, prototype, synthesis, report, bench.specification.limits)
