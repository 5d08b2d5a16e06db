"""Split wideband captures into channels, prove what each leaks, and put the band back together."""

from chanbank.analysis.activity import Activity, measure_activity
from chanbank.analysis.bank import AnalysisBank
from chanbank.analysis.summary import ChannelRecording, SplitResult
from chanbank.fixedpoint.bank import FixedPointBank, FixedPointFrames
from chanbank.fixedpoint.export import export_coefficients
from chanbank.fixedpoint.noise import NoiseReport, dft_rounding_db
from chanbank.fixedpoint.quantise import (
    QuantisedPrototype,
    quantised,
    rounding_floor_db,
    word_length,
)
from chanbank.metrics.compare import ReportComparison, compare_reports
from chanbank.metrics.formula import bank_report
from chanbank.metrics.limits import LimitCheck, Limits
from chanbank.metrics.measured import measured_report
from chanbank.metrics.report import BankReport
from chanbank.metrics.verify import ReportDisagreement
from chanbank.plan import ChannelPlan
from chanbank.plots.activity import plot_activity
from chanbank.plots.prototype import plot_channels, plot_prototype
from chanbank.plots.report import plot_distortion, plot_error, plot_leakage
from chanbank.plots.sheet import summary_sheet
from chanbank.plots.tradeoff import plot_tradeoff
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.energy import energy_prototype
from chanbank.prototype.equiripple import equiripple_prototype
from chanbank.prototype.kaiser import kaiser_prototype
from chanbank.prototype.lengths import length_estimates
from chanbank.prototype.nyquist import nyquist_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.prototype.tight import tight_prototype
from chanbank.prototype.window import window_prototype
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.npy import NpyWriter
from chanbank.recordings.open import open_recording
from chanbank.recordings.recording import Recording
from chanbank.recordings.segment import Annotation, Segment
from chanbank.recordings.sigmf_write import write_sigmf
from chanbank.recordings.sigmf_writer import SigMFWriter
from chanbank.search.design import Design
from chanbank.search.find import find_designs
from chanbank.search.result import DesignSearch
from chanbank.search.specification import Specification
from chanbank.splitting import split_recording
from chanbank.synthesis.bank import SynthesisBank
from chanbank.synthesis.block import BlockInverse
from chanbank.synthesis.combine import ChannelCombiner, combine_channels
from chanbank.synthesis.condition import noise_gain, white_error
from chanbank.synthesis.dual import dual_prototype
from chanbank.synthesis.frames import FrameBounds, frame_bounds
from chanbank.synthesis.pair import prototype_pair

__all__ = [
    "Activity",
    "AnalysisBank",
    "Annotation",
    "BankReport",
    "BlockInverse",
    "ChannelCombiner",
    "ChannelPlan",
    "ChannelRecording",
    "Design",
    "DesignSearch",
    "FixedPointBank",
    "FixedPointFrames",
    "FrameBounds",
    "LimitCheck",
    "Limits",
    "NoiseReport",
    "NpyWriter",
    "Prototype",
    "QuantisedPrototype",
    "Recording",
    "RecordingError",
    "ReportComparison",
    "ReportDisagreement",
    "Segment",
    "SigMFWriter",
    "Specification",
    "SplitResult",
    "SynthesisBank",
    "bank_report",
    "boxcar_prototype",
    "combine_channels",
    "compare_reports",
    "dft_rounding_db",
    "dual_prototype",
    "energy_prototype",
    "equiripple_prototype",
    "export_coefficients",
    "find_designs",
    "frame_bounds",
    "kaiser_prototype",
    "length_estimates",
    "measure_activity",
    "measured_report",
    "noise_gain",
    "nyquist_prototype",
    "open_recording",
    "plot_activity",
    "plot_channels",
    "plot_distortion",
    "plot_error",
    "plot_leakage",
    "plot_prototype",
    "plot_tradeoff",
    "prototype_pair",
    "quantised",
    "rounding_floor_db",
    "split_recording",
    "summary_sheet",
    "tight_prototype",
    "white_error",
    "window_prototype",
    "word_length",
    "write_sigmf",
]
