"""The prototype lowpass: the one filter that every channel of a bank is a shifted copy of."""

import json
import zipfile

import numpy as np

from chanbank._checks import (
    Array,
    Boolean,
    Integer,
    Optional,
    OwnCheck,
    PathLike,
    Text,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank._files import whole_file

__all__ = ["Prototype"]

_FILE_VERSION = 1


class Prototype:
    """A real lowpass h[0..L-1] for a bank of M channels.

    Its response is H(f) = sum_i h[i] exp(-2j pi f i / M), f in channel spacings. The design
    functions return sum(h) = 1; this class keeps the taps it is given.

    Parameters
    ----------
    taps : array_like of float, shape (L,)
        Impulse response, L >= 1, finite real numbers; copied to float64.
    channels : int
        Number of channels M of the bank it is meant for, 1 to 2**20.
    label : str, default ""
        A name for tables and pictures.
    design : dict, optional
        How it was designed (JSON-safe: numbers, text, lists, dicts); saved with it.
    pair_delay : int, optional
        For a synthesis prototype: whole samples of delay of the analysis-synthesis pair.

    Attributes
    ----------
    taps : numpy.ndarray
        Read-only float64, shape (L,).
    length : int
        L.
    taps_per_branch : int
        P = ceil(L / M).
    delay : float
        Group delay at zero frequency in samples, sum(i h[i]) / sum(h); (L - 1)/2 when symmetric.

    Raises
    ------
    TypeError, ValueError
        Taps that are not a non-empty one-dimensional array of finite real numbers; channels out
        of range; a design that JSON cannot hold.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.

    Examples
    --------
    >>> import numpy as np
    >>> from chanbank import Prototype
    >>> h = Prototype(np.ones(8) / 8, 4, label="moving average")
    >>> h
    Prototype(length=8, channels=4, taps_per_branch=2, label='moving average')
    >>> h.delay
    3.5
    >>> float(abs(h.response([0.5]))[0].round(12))
    0.0
    """

    __slots__ = ("_channels", "_delay", "_design", "_label", "_pair_delay", "_taps")

    @checked(
        taps=Array(1),
        channels=Integer(1, 1 << 20),
        label=Text(),
        design=OwnCheck("None or a dict that JSON can hold", (3, TypeError), ([], TypeError)),
        pair_delay=Optional(Integer(0)),
    )
    def __init__(self, taps, channels, *, label="", design=None, pair_delay=None):
        self._taps = taps
        self._channels = channels
        self._label = label
        self._design = _json_text(design)
        self._pair_delay = pair_delay
        self._delay = None

    @property
    def taps(self):
        return self._taps

    @property
    def channels(self):
        return self._channels

    @property
    def label(self):
        return self._label

    @property
    def design(self):
        """How it was designed, a fresh dict ({} when unknown)."""
        return json.loads(self._design)

    @property
    def pair_delay(self):
        """Delay of the analysis-synthesis pair in whole samples, or None."""
        return self._pair_delay

    @property
    def length(self):
        return len(self._taps)

    @property
    def taps_per_branch(self):
        return -(-len(self._taps) // self._channels)

    @property
    def delay(self):
        if self._delay is None:
            self._delay = _group_delay(self._taps)
        return self._delay

    def branches(self):
        """The polyphase branches: branch m holds h[m], h[m + M], h[m + 2M] ...

        Returns
        -------
        numpy.ndarray
            float64, shape (channels, taps_per_branch), zero where the last row is not filled.

        Examples
        --------
        >>> from chanbank import Prototype
        >>> Prototype([1, 2, 3, 4, 5], 2).branches()
        array([[1., 3., 5.],
               [2., 4., 0.]])
        """
        padded = np.zeros(self.taps_per_branch * self._channels)
        padded[: self.length] = self._taps
        return np.ascontiguousarray(padded.reshape(self.taps_per_branch, self._channels).T)

    @checked(frequencies=Array(None, empty=True))
    def response(self, frequencies):
        """Complex frequency response H(f) = sum_i h[i] exp(-2j pi f i / M).

        Parameters
        ----------
        frequencies : array_like of float
            In channel spacings, any shape; finite. H has period M.

        Returns
        -------
        numpy.ndarray
            complex128, the shape of `frequencies`.

        Raises
        ------
        TypeError, ValueError
            Frequencies that are not finite real numbers.

        Examples
        --------
        >>> from chanbank import boxcar_prototype
        >>> abs(boxcar_prototype(64).response([0, 0.5, 1])).round(4)
        array([1.    , 0.6367, 0.    ])
        """
        return _response(self._taps, self._channels, frequencies)

    @checked(path=PathLike(), overwrite=Boolean())
    def save(self, path, *, overwrite=False):
        """Write the prototype to a .npz file, whole or not at all.

        The file holds ``format`` ("chanbank prototype"), ``version`` (1), ``taps`` (float64),
        ``channels``, ``label``, ``design`` (JSON text) and ``pair_delay`` (-1: none), and needs
        nothing but ``numpy.load`` to read.

        Parameters
        ----------
        path : path
            Where to; ".npz" is added when missing.
        overwrite : bool, default False
            Replace a file that exists.

        Returns
        -------
        str
            The path written.

        Raises
        ------
        FileExistsError
            The file exists and `overwrite` is False.
        OSError
            The folder cannot be written; nothing is left behind.

        Examples
        --------
        >>> import tempfile, os
        >>> from chanbank import Prototype, boxcar_prototype
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = boxcar_prototype(8).save(os.path.join(folder, "boxcar.npz"))
        ...     Prototype.load(path) == boxcar_prototype(8)
        True
        """
        path = path if str(path).endswith(".npz") else f"{path}.npz"
        with whole_file(path, overwrite=overwrite) as file:
            np.savez(
                file,
                format="chanbank prototype",
                version=_FILE_VERSION,
                taps=self._taps,
                channels=self._channels,
                label=self._label,
                design=self._design,
                pair_delay=-1 if self._pair_delay is None else self._pair_delay,
            )
        return path

    @classmethod
    @checked(path=PathLike())
    def load(cls, path):
        """Read a prototype that `save` wrote.

        Parameters
        ----------
        path : path
            A .npz file.

        Returns
        -------
        Prototype

        Raises
        ------
        FileNotFoundError
            No such file.
        ValueError
            Not a prototype file, or one of a later version; the message says what was found.

        Examples
        --------
        See `save`.
        """
        try:
            with np.load(path, allow_pickle=False) as file:
                held = {name: file[name] for name in file.files}
        except (ValueError, EOFError, AttributeError, zipfile.BadZipFile):
            # NumPy's own advice for such files, to load them unsafely, is not for this one.
            raise ValueError(
                f"{path!r} is not a prototype file, a .npz as Prototype.save writes it"
            ) from None
        if str(held.get("format")) != "chanbank prototype" or "taps" not in held:
            raise ValueError(
                f"{path!r} is not a prototype file: it holds {sorted(held)}, "
                "expected format, version, taps, channels, label, design, pair_delay"
            )
        if int(held["version"]) > _FILE_VERSION:
            raise ValueError(
                f"{path!r} is a prototype file of version {int(held['version'])}; "
                f"this library reads up to version {_FILE_VERSION}"
            )
        delay = int(held["pair_delay"])
        return cls(
            held["taps"],
            int(held["channels"]),
            label=str(held["label"]),
            design=json.loads(str(held["design"])),
            pair_delay=None if delay < 0 else delay,
        )

    def __eq__(self, other):
        if not isinstance(other, Prototype):
            return NotImplemented
        return (
            self._channels == other._channels
            and np.array_equal(self._taps, other._taps)
            and self._label == other._label
            and self._design == other._design
            and self._pair_delay == other._pair_delay
        )

    def __hash__(self):
        return hash((self._channels, self._taps.tobytes(), self._label))

    def __repr__(self):
        text = (
            f"Prototype(length={self.length}, channels={self._channels}, "
            f"taps_per_branch={self.taps_per_branch}"
        )
        if self._pair_delay is not None:
            text += f", pair_delay={self._pair_delay}"
        return text + (f", label={self._label!r})" if self._label else ")")

    def __getstate__(self):
        return {name: getattr(self, name) for name in self.__slots__}

    def __setstate__(self, state):
        for name, value in state.items():
            setattr(self, name, value)
        self._taps.flags.writeable = False


def _json_text(design):
    if design is None:
        return "{}"
    if not isinstance(design, dict):
        raise wrong_type("design", "None or a dict that JSON can hold", design)
    try:
        return json.dumps(design, sort_keys=True, allow_nan=False)
    except (TypeError, ValueError):
        raise wrong_value("design", "a dict that JSON can hold, without NaN", design) from None


def _group_delay(taps):
    """Group delay at zero frequency; exact where the taps are symmetric about some half sample."""
    total = taps.sum()
    index = np.arange(len(taps))
    # A highpass or a null at zero frequency has no delay there: take the centre of energy.
    weight = taps if abs(total) > 1e-9 * np.abs(taps).sum() else taps**2
    if not weight.any():
        return (len(taps) - 1) / 2
    delay = float((index * weight).sum() / weight.sum())
    twice = round(2 * delay)
    low, high = max(0, twice - len(taps) + 1), min(len(taps) - 1, twice)
    if low <= high:
        window = taps[low : high + 1]
        outside = np.concatenate([taps[:low], taps[high + 1 :]])
        slack = 1e-12 * np.abs(taps).max()
        if np.abs(window - window[::-1]).max() <= slack and not (np.abs(outside) > slack).any():
            return twice / 2
    return delay


def _response(taps, channels, frequencies):
    """H at any frequencies: tap i = a*B + b, so two small tables of exponentials and one product.

    The product runs in BLAS and the tables take (L/B + B) exponentials a frequency instead of L.
    """
    shape, flat = np.shape(frequencies), np.ravel(frequencies)
    step = max(1, int(np.sqrt(len(taps))))
    rows = -(-len(taps) // step)
    table = np.zeros(rows * step)
    table[: len(taps)] = taps
    table = table.reshape(rows, step).T
    # Whole spacings turn by whole M-th parts: reduced in integers, so that only the rest of less
    # than half a spacing is rounded, whatever the length.
    whole = np.rint(flat)
    rest = (flat - whole) / channels
    whole = np.mod(whole, channels).astype(np.int64)
    result = np.empty(len(flat), np.complex128)
    chunk = max(1, (1 << 22) // (rows + step))
    for start in range(0, len(flat), chunk):
        part = slice(start, start + chunk)
        fine, coarse = (
            np.exp(
                -2j * np.pi * (whole[part, None] * at % channels / channels + rest[part, None] * at)
            )
            for at in (np.arange(step), np.arange(rows) * step)
        )
        result[part] = np.einsum("fa,fa->f", fine @ table, coarse)
    return result.reshape(shape)
