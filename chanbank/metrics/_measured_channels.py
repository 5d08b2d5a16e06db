"""The figures of the tested channels, from a sweep and from tones."""

import numpy as np

from chanbank.metrics._noise import BIN_WIDTH, folded_power, noise_power
from chanbank.metrics._sweep import Lines, sweep, sweep_size
from chanbank.metrics._tone_run import run_tones
from chanbank.metrics.bands import neighbours, own_mirrors, worse_of
from chanbank.metrics.figures import DEFINITIONS, Figure
from chanbank.metrics.tones import MeasuredLeakage

__all__ = ["measure_channels"]

_RANDOM_TONES = 16
# What the finite step between lines may cost a figure, in dB.
_STEP_DB = 0.01
_SIDES = (("_lower", -1), ("_upper", 1))
_DISTANCES = (
    ("adjacent_leakage_ratio", "adjacent_tone", 1),
    ("alternate_leakage_ratio", "alternate_tone", 2),
)


def measure_channels(driver, tested, bands, edges, most):
    """Figures, leakage, tone responses and notes."""
    return _Channels(driver, tested, bands, edges, most).measure()


class _Channels:
    def __init__(self, driver, tested, bands, edges, most):
        self.driver, self.plan, self.tested = driver, driver.plan, tested
        self.channel = driver.outputs[tested]
        self.bands, self.edges = bands, edges
        self.spacing = 1.0 / driver.channels
        self.centres = self.plan.normalised_frequencies
        blocks, self.whole, self.needed = self._blocks(most)
        self.lines = Lines(sweep(driver, tested, blocks), driver, tested)
        self.wanted, self.found = [], {}

    def _blocks(self, most):
        """Blocks to sweep: all, or those near the tested channels and their images."""
        driver = self.driver
        size, hop = sweep_size(driver), driver.hop
        each = (size + driver.settle()) * hop * (2 if driver.real else 1)
        if each * hop <= most:
            return range(hop), True, each * hop
        reach = 3 * self.spacing
        near = set()
        for centre in self.centres[self.channel]:
            for middle in (centre, -centre) if driver.real else (centre,):
                low, high = np.floor((middle - reach) * hop), np.floor((middle + reach) * hop)
                near |= {int(r) % hop for r in np.arange(low, high + 1)}
        return sorted(near), False, each * hop

    def band(self, j, image=False):
        """The occupied band of channel j, or its mirror image, as two frequencies."""
        half = self.bands[j] * self.spacing / 2
        centre = -self.centres[j] if image else self.centres[j]
        return centre - half, centre + half

    def intervals(self, j):
        """Where a signal in channel j has power: its band, and the image of it for real samples."""
        low, high = self.band(j)
        if not self.plan.real:
            return [(low, high)]
        for middle in (0.0, 0.5):
            if low < middle < high:
                reach = max(middle - low, high - middle)
                return [(middle - reach, middle + reach)]
        return [(low, high), (-high, -low)]

    # What is asked of single tones: a list first, the answers once all have run.

    def ask(self, frequency):
        self.wanted.append(frequency)
        return len(self.wanted) - 1

    def level(self, row, ticket):
        return float(np.abs(self.tones[ticket].responses[self.tested[row]]) ** 2)

    def measure(self):
        rows = range(len(self.tested))
        plans = [self._ask_channel(row) for row in rows]
        for frequency in self.driver.rng.random(_RANDOM_TONES):
            self.ask(frequency)
        self.tones = run_tones(self.driver, self.wanted)
        answers = [self._answer_channel(row, plans[row]) for row in rows]
        figures = {}
        for name in answers[0]:
            values = [a[name][0] for a in answers]
            reasons = {row: a[name][1] for row, a in enumerate(answers) if a[name][1]}
            spread = [a[name][2] for a in answers if a[name][2] is not None]
            if len(set(reasons.values())) == 1 and len(reasons) == len(values):
                reasons = {None: reasons[0]}
            figures[name] = Figure(
                DEFINITIONS[name], values, reasons, max(spread) if spread else None
            )
        for leakage, tone, _ in _DISTANCES:
            figures[leakage] = self._worse(leakage, figures)
            figures[tone] = self._worse(tone, figures)
        return figures, self._leakage(), self.tones, self._notes()

    def _worse(self, name, figures):
        figure = worse_of(name, figures)
        spread = figures[name + "_lower"].uncertainty or figures[name + "_upper"].uncertainty
        return Figure(figure.definition, figure.values, figure.reasons, spread)

    def _notes(self):
        notes = [
            f"swept with periodic noise, {self.lines.period} lines; steps between lines cost at "
            f"most {_STEP_DB} dB"
        ]
        if not self.whole:
            notes.append(
                "swept near the tested channels only: all frequencies would take "
                f"{self.needed:,} samples (max_samples)"
            )
        return notes

    def _ask_channel(self, row):
        k = int(self.channel[row])
        centre, spacing = self.centres[k], self.spacing
        low, high = self.band(k)
        asked = {
            "centre": self.ask(centre),
            "half": [self.ask(centre + s * spacing / 2) for s in (-1, 1)],
            "edges": [self.ask(low), self.ask(high)],
        }
        edge = self.edges[k]
        if edge < self.driver.channels / 2:
            asked["stop"] = [self.ask(centre + s * edge * spacing) for s in (-1, 1)]
            asked["stop"] += self._ask_peak(row, lambda offset, edge=edge: np.abs(offset) > edge)
        start = self.lines.first_minima(row) if self.whole else None
        if start is not None:
            lower, upper = start
            asked["sidelobe"] = self._ask_peak(
                row, lambda offset: (offset < -lower) | (offset > upper)
            )
        for _, tone, distance in _DISTANCES:
            for side, sign in _SIDES:
                j = int(neighbours(self.plan, sign * distance)[0][k])
                if j >= 0:
                    a, b = self.band(j)
                    asked[tone + side] = [self.ask(a), self.ask(b), *self._ask_inside(row, a, b)]
        return asked

    def _ask_peak(self, row, where):
        """The line of greatest power among offsets `where`, moved to the top of its parabola."""
        if not self.whole:
            return []
        offset, power = self.lines.shifted(row)
        held = np.where(where(offset), power, -1.0)
        at = int(held.argmax())
        return [] if held[at] < 0 else [self._ask_top(offset, power, at, self.centre_of(row))]

    def _ask_inside(self, row, low, high):
        band = self.lines.band(low, high)
        power = self.lines.power[row, band.lines]
        if np.isnan(power).any() or len(power) < 5:
            return []
        at = 1 + int(power[1:-1].argmax())
        offset = (np.floor(low * self.lines.period) + np.arange(len(power))) / self.lines.period
        return [self._ask_top(offset * self.driver.channels, power, at, 0.0)]

    def centre_of(self, row):
        return self.centres[int(self.channel[row])]

    def _ask_top(self, offset, power, at, origin):
        shift = 0.0
        if 0 < at < len(power) - 1:
            left, mid, right = np.sqrt(power[at - 1 : at + 2])
            bend = left - 2 * mid + right
            if bend < 0 and mid >= max(left, right):
                shift = 0.5 * (left - right) / bend
        step = offset[1] - offset[0]
        return self.ask(origin + (offset[at] + shift * step) * self.spacing)

    # The answers: name -> (value, reason for its absence, uncertainty).

    def _answer_channel(self, row, asked):
        k = int(self.channel[row])
        centre = self.level(row, asked["centre"])
        answer = dict(self._shape(row, k, asked, centre))
        answer |= self._leaks(row, k, asked, centre)
        answer |= self._alias(row, k)
        answer["image_rejection"] = self._image(row, k)
        return answer

    def _decibels(self, value, reference, extra=_STEP_DB):
        """dB of a ratio, with the uncertainty that rounding at the floor gives it."""
        with np.errstate(divide="ignore"):
            level = 10 * np.log10(value / reference)
        noise = self.driver.epsilon / max(np.sqrt(value / reference), self.driver.epsilon)
        return float(level), "", float(np.hypot(extra, 8.7 * min(noise, 1.0)))

    def _largest(self, row, tickets):
        return max(self.level(row, ticket) for ticket in tickets)

    def _shape(self, row, k, asked, centre):
        limited = f"needs a sweep of {self.needed:,} samples (max_samples)"
        low, high = self.band(k)
        band = self.lines.band(low, high)
        inner = self.lines.power[row, band.lines[1:-1]]
        ends = [self.level(row, ticket) for ticket in asked["edges"]]
        held = np.concatenate([inner, ends])
        yield "passband_ripple", self._decibels(held.max(), held.min())
        half = min(self.level(row, ticket) for ticket in asked["half"])
        yield "scalloping_loss", self._decibels(centre, half, 0.001)
        if self.whole:
            total = self.lines.power[row].mean() * self.driver.channels
            yield "enbw", (float(total / centre), "", 1e-3 * float(total / centre))
        else:
            power, spread = noise_power(
                self.driver, int(self.tested[row]), lambda f: np.ones(len(f))
            )
            scale = self.driver.channels / centre
            yield "enbw", (power * scale, "", spread * scale)
        for name, factor in (("bandwidth_3db", 0.5), ("bandwidth_6db", 0.25)):
            crossings = self.lines.crossings(row, factor, centre)
            if crossings is None:
                yield name, (np.nan, "the response never falls that far", None)
            else:
                yield name, (sum(crossings), "", 2 * self.driver.channels / self.lines.period)
        for name, key, reason in (
            ("highest_sidelobe", "sidelobe", "the response has no minimum outside its -6 dB point"),
            ("stopband_level", "stop", "the stopband edge lies at or beyond half the sample rate"),
        ):
            if not self.whole:
                yield name, (np.nan, limited, None)
            elif not asked.get(key):
                yield name, (np.nan, reason, None)
            else:
                yield name, self._decibels(self._largest(row, asked[key]), centre)
        yield "delay_spread", (self.lines.delay_spread(row, band), "", None)

    def power_from(self, row, j):
        """Power of a signal in channel j in this output, in channel spacings; NaN if not run."""
        total = sum(
            self.lines.band(a, b).integral(self.lines.power[row]) for a, b in self.intervals(j)
        )
        return float(total) * self.driver.channels

    def _leaks(self, row, k, asked, centre):
        own = self.power_from(row, k)
        answer = {}
        for leakage, tone, distance in _DISTANCES:
            for side, sign in _SIDES:
                there, reason = neighbours(self.plan, sign * distance)
                j = int(there[k])
                if j < 0:
                    answer[leakage + side] = answer[tone + side] = (np.nan, reason, None)
                    continue
                level, _, spread = self._decibels(self.power_from(row, j), own)
                answer[leakage + side] = (-level, "", spread)
                largest = self._largest(row, asked[tone + side])
                answer[tone + side] = self._decibels(largest, centre)
        answer["total_leakage"] = self._total(row, k, own)
        return answer

    def _total(self, row, k, own):
        others = [j for j in range(self.plan.output_channels) if j != k]
        if not others:
            return np.nan, "there is no other channel", None
        if self.whole:
            return self._decibels(sum(self.power_from(row, j) for j in others), own)
        edges = [interval for j in others for interval in self.intervals(j)]
        power, spread = noise_power(self.driver, int(self.tested[row]), lambda f: _inside(f, edges))
        power, spread = power * self.driver.channels, spread * self.driver.channels
        level, _, floor = self._decibels(power, own)
        return level, "", float(np.hypot(floor, 4.34 * spread / power))

    def _alias(self, row, k):
        if self.driver.hop == 1:
            reason = "every sample is kept (hop 1): nothing aliases"
            return dict.fromkeys(("alias_worst", "alias_mean"), (np.nan, reason, None))
        low, high = self.band(k)
        band = self.lines.band(low, high)
        if self.whole:
            aliases, own = self.lines.aliases(row), self.lines.power[row]
            worst = (band.inside(aliases) / band.inside(own)).max()
            mean = band.integral(aliases) / band.integral(own)
            return {
                "alias_worst": self._decibels(worst, 1.0),
                "alias_mean": self._decibels(mean, 1.0),
            }
        own = float(band.integral(self.lines.power[row]))
        guard = 1.5 * BIN_WIDTH / self.driver.hop
        power, spread = folded_power(
            self.driver,
            int(self.tested[row]),
            # The wanted signal itself must not reach the bins at the ends of the band.
            lambda f: 1.0 - _inside(f, [(low - guard, high + guard)]),
            low,
            high,
        )
        level, _, floor = self._decibels(power, own)
        limited = f"needs a sweep of {self.needed:,} samples (max_samples)"
        return {
            "alias_worst": (np.nan, limited, None),
            "alias_mean": (level, "", float(np.hypot(floor, 4.34 * spread / power))),
        }

    def _image(self, row, k):
        if not self.plan.real:
            return np.nan, "complex input has no mirror image", None
        if own_mirrors(self.plan)[k]:
            return np.nan, "the channel is its own mirror image", None
        direct = self.lines.band(*self.band(k)).integral(self.lines.power[row])
        image = self.lines.band(*self.band(k, image=True)).integral(self.lines.power[row])
        level, _, spread = self._decibels(float(image), float(direct))
        return -level, "", spread

    def _leakage(self):
        count = self.plan.output_channels
        powers = np.array(
            [[self.power_from(row, j) for j in range(count)] for row in range(len(self.tested))]
            if count <= 4096
            else [
                [self.power_from(row, j) if abs(j - k) <= 2 else np.nan for j in range(count)]
                for row, k in enumerate(self.channel)
            ]
        )
        return MeasuredLeakage(self.channel, powers)


def _inside(frequencies, intervals):
    """1 where a frequency lies in any of the intervals (cycles per sample, modulo 1)."""
    size = len(frequencies)
    marks = np.zeros(size + 1)
    for low, high in intervals:
        first, last = int(np.ceil(low * size)), int(np.floor(high * size)) + 1
        start = first % size
        stop = start + (last - first)
        marks[start] += 1
        if stop <= size:
            marks[stop] -= 1
        else:
            marks[size] -= 1
            marks[0] += 1
            marks[stop - size] -= 1
    return (np.cumsum(marks[:-1]) > 0).astype(float)
