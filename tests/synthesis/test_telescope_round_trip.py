"""Real telescope recordings (from the baseband package) through both banks and out again."""

import numpy as np
import pytest
from baseband import dada, data, vdif

from chanbank import AnalysisBank, ChannelPlan, SynthesisBank, prototype_pair, white_error


@pytest.fixture(scope="module")
def telescope():
    """Samples (streams, time): 16 MHz complex, two polarisations; 32 MHz real, eight threads."""
    with dada.open(data.SAMPLE_DADA, "rs") as stream:
        complex_samples = np.ascontiguousarray(stream.read().T.astype("complex128"))
    with vdif.open(data.SAMPLE_VDIF, "rs") as stream:
        real_samples = np.ascontiguousarray(np.squeeze(stream.read()).T.astype("float64"))
    return {False: complex_samples, True: real_samples}


def rms(values):
    return np.sqrt(np.mean(np.abs(values) ** 2, axis=-1))


@pytest.mark.parametrize("real", [False, True])
@pytest.mark.parametrize("dtype", ["complex64", "complex128"])
@pytest.mark.parametrize("offset", [0, 0.5])
def test_in_and_out_again(telescope, real, dtype, offset):
    samples = telescope[real]
    rate = 32e6 if real else 16e6
    plan = ChannelPlan(rate, 64, 48, real=real, offset=offset)
    h, g = prototype_pair(plan, 8, 16)
    kind = "float64" if real else "complex128"
    if dtype == "complex64":
        kind = "float32" if real else "complex64"
    given = samples.astype(kind)
    analysis = AnalysisBank(plan, h, dtype=dtype)
    synthesis = SynthesisBank(plan, g, dtype=dtype)
    cuts = [1, 1000, 7777]
    pieces = [synthesis.push(analysis.push(part)) for part in np.split(given, cuts, axis=-1)]
    pieces += [synthesis.push(analysis.finish()), synthesis.finish()]
    whole = np.concatenate(pieces, axis=-1)
    count = samples.shape[-1]
    back = whole[..., synthesis.delay : synthesis.delay + count]
    error = rms(back - given) / rms(given)
    # The exact figure holds for white input. A telescope's band is not white: each stream may
    # lie above or below it, by no more than the worst frequency does.
    expected = white_error(plan, h, g)
    floor = 2e-7 if dtype == "complex64" else 1e-14
    assert (error < 3 * expected + floor).all()
    assert (error > expected / 3).all()
    assert expected < 10 ** (-75 / 20)


def test_an_exact_pair_returns_them_to_rounding(telescope):
    for real, samples in telescope.items():
        plan = ChannelPlan(32e6 if real else 16e6, 64, 32, real=real)
        h, g = prototype_pair(plan, 8, 16, exact=True)
        frames = AnalysisBank(plan, h, dtype="complex128")(samples)
        back = SynthesisBank(plan, g, dtype="complex128")(frames, length=samples.shape[-1])
        # Two banks of some ten roundings each, and taps that are exact to a few eps.
        assert (rms(back - samples) < 1e-14 * rms(samples)).all()
