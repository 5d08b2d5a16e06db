"""DFT plans of pyFFTW's own objects, for the NumPy engine."""

import numpy as np
import pyfftw

from chanbank._engine.planning import effort, planning

__all__ = ["BatchDft"]


class BatchDft:
    """One plan for `batch` rows of M points between two aligned buffers of its own.

    kind "forward" (complex), "inverse" (complex, unnormalised) or "real" (real to half spectrum),
    "real-inverse" (half spectrum to real, unnormalised).
    """

    def __init__(self, channels, batch, dtype, kind, room=0):
        real_dtype = np.float32 if np.dtype(dtype) == np.complex64 else np.float64
        half = channels // 2 + 1
        with planning():
            spectrum = half if kind in ("real", "real-inverse") else channels
            # Rows on cache lines, with `room` more points behind each for what may run over.
            wave_dtype = np.dtype(real_dtype if kind.startswith("real") else dtype)
            line = 64 // wave_dtype.itemsize
            pitch = -(-(channels + room) // line) * line if room else channels
            self.wide = pyfftw.zeros_aligned((batch, pitch), wave_dtype, n=64)
            wave = self.wide[:, :channels]
            bins = pyfftw.zeros_aligned((batch, spectrum), dtype, n=64)
            forward = kind in ("forward", "real")
            source, target = (wave, bins) if forward else (bins, wave)
            flag, seconds = effort(channels)
            self._plan = pyfftw.FFTW(
                source,
                target,
                axes=(1,),
                direction="FFTW_FORWARD" if forward else "FFTW_BACKWARD",
                flags=(flag, "FFTW_DESTROY_INPUT"),
                planning_timelimit=seconds,
            )
        self.wide.fill(0)
        source.fill(0)
        self.source, self.target, self.batch = source, target, batch

    def execute(self):
        self._plan.execute()
