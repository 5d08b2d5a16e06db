"""The shell entry, ``python -m chanbank``: one job a command, with the library's own defaults.

Exit codes: 0 done and every limit met, 1 a limit or check not met, 2 wrong usage or input.
"""

import argparse
import json
import os
import re
import sys
import warnings
from fractions import Fraction

from chanbank._describe import describe
from chanbank._rebuild import rebuild
from chanbank._shell import propose, report, split
from chanbank.metrics.figures import DEFINITIONS

__all__ = ["main"]

_ABOUT = """\
Split wideband captures into channels, prove what each channel leaks, and put the band back
together. Each command has its own --help with examples.

Numbers with a unit may be written as 25k, 4.8M, 25000/3 or 156.8e6. --json prints the result for
programs. Exit codes: 0 done and every limit met, 1 a limit or check not met, 2 wrong usage or
input.
"""


_PREFIXES = {"k": 10**3, "M": 10**6, "G": 10**9}


def _frequency(text):
    """An exact number from 25k, 4.8M, 25000/3 or 156.8e6, with or without Hz."""
    number = text.strip().removesuffix("Hz").strip()
    scale = _PREFIXES.get(number[-1:], 1)
    try:
        return Fraction(number[:-1] if scale > 1 else number) * scale
    except (ValueError, ZeroDivisionError):
        raise argparse.ArgumentTypeError(
            f"{text!r} is no number of hertz such as 25k, 4.8M, 25000/3 or 156.8e6"
        ) from None


def _limit(text):
    """A pair (name, value) from text such as adjacent_leakage_ratio=70."""
    name, _, value = text.partition("=")
    try:
        return name.strip(), float(value)
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"{text!r} is not of the form FIGURE=VALUE, as in adjacent_leakage_ratio=70; the "
            f"figures are {', '.join(DEFINITIONS)}"
        ) from None


class _Parser(argparse.ArgumentParser):
    """Refuses in one line."""

    def error(self, message):
        self.exit(2, f"chanbank: {message} (help: {self.prog} --help)\n")


def _build_parser():
    parser = _Parser(
        prog="python -m chanbank",
        description=_ABOUT,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    commands = parser.add_subparsers(dest="command", metavar="command", title="commands")

    def command(name, run, purpose, examples, codes=""):
        lines = "\n".join(f"  python -m chanbank {name} {example}" for example in examples)
        sub = commands.add_parser(
            name,
            help=purpose,
            description=purpose[0].upper() + purpose[1:] + ".",
            epilog=f"examples:\n{lines}" + ("\n\n" + codes if codes else ""),
            formatter_class=argparse.RawDescriptionHelpFormatter,
        )
        sub.set_defaults(run=run)
        sub.add_argument("--json", action="store_true", help="print the result as JSON")
        return sub

    sub = command(
        "describe",
        describe,
        "what a recording holds: format, rate, levels, segments, and whether a raster fits",
        [
            "grauwiek.sigmf-meta",
            "capture.bin --datatype ci16_le --sample-rate 4.8M --spacing 25k",
        ],
    )
    _add_recording(sub)
    _add_raster(sub)

    sub = command(
        "propose",
        propose,
        "find the designs that meet a receiver's specification at the least cost",
        [
            "--sample-rate 4.8M --spacing 25k --neighbour-rejection 70 --alias-level -70",
            "--sample-rate 2.4M --spacing 25000/3 --occupied-bandwidth 5k \\\n"
            "      --neighbour-rejection 60 --oversampling 2 --save design.npz",
        ],
        "Exit code 1 when no design meets the specification; the reason says which limit must "
        "give.",
    )
    group = sub.add_argument_group("samples and raster")
    _add_rates(group, "of the samples")
    group.add_argument("--real", action="store_true", help="real samples, not complex ones")
    group.add_argument("--spacing", type=_frequency, metavar="HZ", help="between channel centres")
    group.add_argument("--align-to", type=_frequency, metavar="HZ", help="must be a channel centre")
    group.add_argument(
        "--oversampling", type=Fraction, default=1, metavar="R", help="at least (default 1)"
    )
    group = sub.add_argument_group("limits")
    _add_occupied(group)
    for name, unit, words in (
        ("neighbour-rejection", "DB", "adjacent and alternate leakage ratio, at least"),
        ("alias-level", "DB", "at most, below 0"),
        ("total-leakage", "DB", "of all channels together, at most, below 0"),
        ("reconstruction-error", "DB", "at most, below 0; asks for a synthesis bank too"),
        ("latency", "S", "seconds, at most"),
        ("multiplications", "N", "real ones per input sample, at most"),
        ("memory", "BYTES", "of state, at most"),
    ):
        group.add_argument(f"--{name}", type=float, metavar=unit, help=words)
    group.add_argument(
        "--passband-ripple", type=float, default=0.5, metavar="DB", help="at most (default 0.5)"
    )
    group = sub.add_argument_group("result")
    group.add_argument("--save", metavar="FILE", help="store the first design's prototype (.npz)")
    group.add_argument("--picture", metavar="FILE", help="draw the trade-off (.pdf or .png)")
    group.add_argument("--overwrite", action="store_true", help="replace a file that exists")
    group.add_argument("--quiet", action="store_true", help="no progress bar")

    sub = command(
        "split",
        split,
        "write one SigMF recording for each channel of a recording",
        [
            "grauwiek.sigmf-meta channels --spacing 25k",
            "capture.bin channels --datatype ci16_le --sample-rate 4.8M --spacing 25k --active",
            "capture.bin channels --datatype ci16_le --sample-rate 4.8M --center-frequency 158M "
            "\\\n      --spacing 25k --frequency 156.8M --frequency 156.3M",
        ],
        "Exit code 1 when --active finds no channel.",
    )
    _add_recording(sub)
    sub.add_argument("destination", help="folder for the channels, made if missing")
    _add_raster(sub)
    _add_filter(sub)
    group = sub.add_argument_group("what to write (by default every channel, all of it)")
    which = group.add_mutually_exclusive_group()
    which.add_argument(
        "--frequency", type=_frequency, action="append", metavar="HZ", help="this channel; repeat"
    )
    which.add_argument("--index", type=int, action="append", metavar="K", help="likewise by index")
    which.add_argument("--active", action="store_true", help="channels with a burst over the noise")
    group.add_argument("--threshold-db", type=float, default=10.0, metavar="DB", help="default 10")
    group.add_argument("--start", type=float, default=0, metavar="S", help="default 0")
    group.add_argument("--length", type=float, metavar="S", help="seconds to split")
    group.add_argument("--no-transients", action="store_true", help="leave the filter's ends out")
    group.add_argument(
        "--output-datatype",
        choices=("cf32_le", "ci16_le"),
        default="cf32_le",
    )
    group.add_argument("--picture", metavar="FILE", help="draw the activity (.pdf or .png)")
    group.add_argument("--overwrite", action="store_true", help="replace what exists")
    group.add_argument("--quiet", action="store_true", help="no progress bar")

    sub = command(
        "report",
        report,
        "what a bank leaks, aliases, costs and fails to reconstruct, and whether limits are met",
        [
            "--sample-rate 4.8M --spacing 25k --bare",
            "--sample-rate 4.8M --spacing 25k --rejection 70 --measured \\\n"
            "      --limit adjacent_leakage_ratio=70 --limit latency_seconds=1e-3",
            "--sample-rate 4.8M --spacing 25k --pair 12 24 --limit reconstruction_error=-100",
        ],
        "Exit code 1 when a limit is not met, or the measured figures disagree with the computed.",
    )
    group = sub.add_argument_group("samples")
    _add_rates(group, "of the samples")
    group.add_argument("--real", action="store_true", help="real samples, not complex ones")
    _add_raster(sub)
    _add_filter(sub)
    _add_pair(sub)
    group = sub.add_argument_group("what to report")
    group.add_argument(
        "--limit", type=_limit, action="append", metavar="FIGURE=VALUE", help="to be met; repeat"
    )
    group.add_argument(
        "--measured", action="store_true", help="run tones and noise, and hold them against theory"
    )
    group.add_argument("--save", metavar="FILE", help="store the analysis prototype (.npz)")
    group.add_argument("--sheet", metavar="FILE", help="draw the summary sheet (.pdf or .png)")
    group.add_argument("--overwrite", action="store_true", help="replace a file that exists")

    sub = command(
        "rebuild",
        rebuild,
        "check a reconstruction: take a recording apart, put it together, measure the difference",
        [
            "grauwiek.sigmf-meta --spacing 25k",
            "grauwiek.sigmf-meta --spacing 25k --mute 156.8M --output without --error-db -70",
        ],
        "Exit code 1 when the error is above --error-db.",
    )
    _add_recording(sub)
    _add_raster(sub)
    _add_filter(sub)
    _add_pair(sub)
    group = sub.add_argument_group("what to do between the banks")
    group.add_argument(
        "--mute", type=_frequency, action="append", default=[], metavar="HZ", help="repeat"
    )
    group.add_argument("--error-db", type=float, default=-60.0, metavar="DB", help="default -60")
    group.add_argument("--output", metavar="NAME", help="keep the rebuilt recording (SigMF)")
    group.add_argument("--overwrite", action="store_true", help="replace a recording that exists")
    return parser


def _add_recording(sub):
    group = sub.add_argument_group("recording")
    group.add_argument("file", help="SigMF, WAV/RF64, .npy, or raw samples")
    group.add_argument("--datatype", metavar="TYPE", help="of raw samples, as SigMF says: ci16_le")
    _add_rates(group, "where the file does not say")
    group.add_argument("--streams", type=int, metavar="N", help="antennas in a raw file")
    group.add_argument(
        "--header-bytes", type=int, default=0, metavar="N", help="to skip in a raw file"
    )
    group.add_argument("--allow-truncated", action="store_true", help="accept a cut-off end")


def _add_rates(group, when):
    group.add_argument("--sample-rate", type=_frequency, metavar="HZ", help=when)
    group.add_argument("--center-frequency", type=_frequency, metavar="HZ", help=when)


def _add_raster(sub):
    group = sub.add_argument_group("raster")
    group.add_argument("--spacing", type=_frequency, metavar="HZ", help="between channel centres")
    group.add_argument(
        "--oversampling",
        type=Fraction,
        default=Fraction(3, 2),
        metavar="R",
        help="least channel rate over spacing, 1 or more (default 3/2)",
    )
    group.add_argument("--hop", type=int, metavar="D", help="instead of --oversampling, in samples")
    group.add_argument(
        "--align-to",
        type=_frequency,
        metavar="HZ",
        help="must be a channel centre",
    )


def _add_filter(sub):
    group = sub.add_argument_group(
        "filter (by default a minimax prototype, 0.1 dB ripple, that keeps neighbours apart)"
    )
    group.add_argument("--rejection", type=float, default=80.0, metavar="DB", help="default 80")
    _add_occupied(group)
    group.add_argument("--prototype", metavar="FILE", help="a saved prototype (.npz) instead")
    group.add_argument("--bare", action="store_true", help="the bare DFT instead")
    group.add_argument("--dtype", choices=("complex64", "complex128"), default="complex64")


def _add_occupied(group):
    group.add_argument(
        "--occupied-bandwidth",
        type=_frequency,
        metavar="HZ",
        help="of each channel, two-sided (default 0.8 of the spacing)",
    )


def _add_pair(sub):
    group = sub.add_argument_group("synthesis")
    group.add_argument(
        "--pair",
        type=int,
        nargs=2,
        metavar=("P", "Q"),
        help="design both prototypes jointly, with so many taps per branch",
    )
    group.add_argument("--synthesis", metavar="FILE", help="a saved synthesis prototype (.npz)")


def main(arguments=None):
    """Run one command; returns the exit code."""
    parser = _build_parser()
    options = parser.parse_args(arguments)
    if options.command is None:
        parser.print_help()
        return 2
    with warnings.catch_warnings():
        warnings.showwarning = _show_warning
        try:
            text, data, met = options.run(options)
            print(json.dumps(data, indent=2, allow_nan=False) if options.json else text)
            sys.stdout.flush()
        except BrokenPipeError:
            # The reader of a pipe has gone (`| head`): no more output, and no complaint about it.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return 0
        except KeyboardInterrupt:
            _complain("stopped")
            return 130
        except (TypeError, ValueError, OSError) as error:
            _complain(_one_line(error, options))
            return 2
    return 0 if met else 1


def _one_line(error, options):
    """An error of the library in one line, its parameters named as the command's options."""
    if isinstance(error, FileNotFoundError) and error.filename is not None:
        return f"{error.filename}: no such file or folder"
    if isinstance(error, OSError) and error.filename is not None and error.strerror:
        return f"{error.filename}: {error.strerror.lower()}"
    text = " ".join(str(error).split()) or type(error).__name__
    # The library speaks of its parameters, a shell user knows options.
    text = text.replace(" must be None or ", " must be ")
    for name in set(vars(options)) - {"command", "destination", "file", "json", "run"}:
        option = "--" + name.replace("_", "-")
        text = re.sub(rf"^{name}\b", option, text)
        text = re.sub(rf"\b{name}=True\b", option, text)
        text = re.sub(rf"\b{name}=", f"{option} ", text)
    return text


def _complain(text):
    print(f"chanbank: {text}", file=sys.stderr, flush=True)


def _show_warning(message, category, filename, lineno, file=None, line=None):
    _complain(f"note: {' '.join(str(message).split())}")


if __name__ == "__main__":
    sys.exit(main())
