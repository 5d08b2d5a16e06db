"""Windows that are sums of cosines, by the names of their publications."""

import numpy as np

__all__ = ["COSINE_WINDOWS", "cosine_window"]

# Coefficients c0, c1, ... of w(z) = c0 - c1 cos z + c2 cos 2z - ..., z from 0 to 2 pi.
# SFT, HFT and Nuttall names: G. Heinzel, A. Ruediger, R. Schilling, "Spectrum and spectral density
# estimation by the discrete Fourier transform (DFT)", MPI fuer Gravitationsphysik, 2002, app. C, D.
# Blackman family: F. J. Harris, Proc. IEEE 66(1), 1978.
COSINE_WINDOWS = {
    "blackman-harris-3": (0.42323, 0.49755, 0.07922),
    "blackman-harris-4": (0.35875, 0.48829, 0.14128, 0.01168),
    "blackman-harris-4-74db": (0.40217, 0.49703, 0.09892, 0.00188),
    "exact-blackman": (7938 / 18608, 9240 / 18608, 1430 / 18608),
    "flat-top-5": (0.21557895, 0.41663158, 0.277263158, 0.083578947, 0.006947368),
    "nuttall3": (0.375, 0.5, 0.125),
    "nuttall3a": (0.40897, 0.5, 0.09103),
    "nuttall3b": (0.4243801, 0.4973406, 0.0782793),
    "nuttall4": (0.3125, 0.46875, 0.1875, 0.03125),
    "nuttall4a": (0.338946, 0.481973, 0.161054, 0.018027),
    "nuttall4b": (0.355768, 0.487396, 0.144232, 0.012604),
    "nuttall4c": (0.3635819, 0.4891775, 0.1365995, 0.0106411),
    "sft3f": (0.26526, 0.5, 0.23474),
    "sft4f": (0.21706, 0.42103, 0.28294, 0.07897),
    "sft5f": (0.1881, 0.36923, 0.28702, 0.13077, 0.02488),
    "sft3m": (0.28235, 0.52105, 0.19659),
    "sft4m": (0.241906, 0.460841, 0.255381, 0.041872),
    "sft5m": (0.209671, 0.407331, 0.281225, 0.092669, 0.0091036),
    "hft70": (1, 1.90796, 1.07349, 0.18199),
    "hft95": (1, 1.9383379, 1.3045202, 0.402827, 0.0350665),
    "hft90d": (1, 1.942604, 1.340318, 0.440811, 0.043097),
    "hft116d": (1, 1.9575375, 1.4780705, 0.6367431, 0.1228389, 0.0066288),
    "hft144d": (1, 1.96760033, 1.57983607, 0.81123644, 0.22583558, 0.02773848, 0.0009036),
    "hft169d": (
        *(1, 1.97441842, 1.65409888, 0.95788186, 0.3367342, 0.06364621, 0.00521942),
        0.00010599,
    ),
    "hft196d": (
        *(1, 1.97928042, 1.710288951, 1.081629853, 0.448734314, 0.112376628, 0.015122992),
        *(0.000871252, 1.1896e-05),
    ),
    "hft223d": (
        *(1, 1.98298997309, 1.75556083063, 1.19037717712, 0.56155440797, 0.17296769663),
        *(0.03233247087, 0.00324954578, 0.0001380104, 1.32725e-06),
    ),
    "hft248d": (
        *(1, 1.985844164102, 1.791176438506, 1.282075284005, 0.667777530266, 0.240160796576),
        *(0.056656381764, 0.008134974479, 0.00062454465, 1.9808998e-05, 1.32974e-07),
    ),
}


def cosine_window(name, length, *, periodic):
    """The named window at `length` points; periodic: z runs to 2 pi (length - 1)/length."""
    coefficients = COSINE_WINDOWS[name]
    turn = np.arange(length) / max(1, length if periodic else length - 1)
    signs = (-1.0) ** np.arange(len(coefficients))
    return sum(
        sign * c * np.cos(2 * np.pi * k * turn)
        for k, (sign, c) in enumerate(zip(signs, coefficients, strict=True))
    )
