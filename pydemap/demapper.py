"""Soft-output demapping: arrays to the C core and back."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from pydemap._pydemap import ffi, lib
from pydemap.constellation import Constellation

Rule = Literal["exact", "max-log", "linear"]

_RULES = {"exact": lib.PDM_EXACT, "max-log": lib.PDM_MAX_LOG, "linear": lib.PDM_LINEAR}
_FAMILIES = {lib.PDM_FOLD: "fold", lib.PDM_BOXES: "boxes", lib.PDM_POINTS: "points"}
_FLOAT_P = ffi.typeof("float[]")
_DOUBLE_P = ffi.typeof("double[]")
_FEWEST_SYMBOLS_A_THREAD = 4096  # below, starting a thread costs more than it saves


@dataclass(frozen=True)
class Word:
    """An integer LLR: `bits` wide, `step` LLR units per count.

    A float32 LLR becomes ``rint(llr / float32(step))`` (half to even), held to
    ``+-limit``: symmetric, so that negating a word is always safe. NaN becomes
    0, an erasure.

    Parameters
    ----------
    bits : int
        2 to 16. Words of up to 8 bits come as int8, wider ones as int16.
    step : float
        LLR per count, from 2**-126 to 2**127.

    Raises
    ------
    TypeError, ValueError
        If `bits` or `step` is of the wrong type or out of range.
    """

    bits: int
    step: float

    def __post_init__(self) -> None:
        if isinstance(self.bits, bool) or not isinstance(self.bits, int | np.integer):
            raise TypeError(f"bits must be an integer from 2 to 16, got {self.bits!r}")
        if not 2 <= self.bits <= 16:
            raise ValueError(f"bits must be from 2 to 16, got {self.bits}")
        if isinstance(self.step, bool) or not isinstance(self.step, int | float | np.integer | np.floating):
            raise TypeError(f"step must be a number > 0 (LLR per count), got {self.step!r}")
        if not 2.0**-126 <= self.step <= 2.0**127:
            raise ValueError(f"step must be a normal float32 > 0 (LLR per count), got {self.step!r}")
        object.__setattr__(self, "bits", int(self.bits))
        object.__setattr__(self, "step", float(self.step))

    @property
    def limit(self) -> int:
        """Largest count, 2**(bits-1) - 1; the least is its negative."""
        return int(2 ** (self.bits - 1) - 1)

    @property
    def dtype(self) -> np.dtype[Any]:
        """int8 up to 8 bits, else int16."""
        return np.dtype(np.int8 if self.bits <= 8 else np.int16)


class SoftDemapper:
    """Turns noisy QAM symbols into bit log-likelihood ratios (LLRs).

    The LLR of bit k of a received symbol ``y = h s + w`` is
    ``ln P(b_k = 0 | y) - ln P(b_k = 1 | y)``: positive means 0.

    Parameters
    ----------
    constellation : Constellation
        Labelled points. The C core recognises by itself whether they form a
        Gray grid ("fold"), a grid of a few products of axes ("boxes") or
        neither ("points"); the attribute `family` tells.
    rule : {"exact", "max-log", "linear"}
        "exact": sums over all points. "max-log": each sum replaced by its
        largest term. "linear": signed distance to the bit's nearest decision
        threshold, times 4 a / N0 with a the half-spacing of the levels; square
        and rectangular Gray grids only.
    output : {"float32", "float64"} or Word
        Type of the LLRs. float64 computes in float64; float32 and words
        compute in float32, and samples given as complex128 are rounded to
        complex64 first.
    positive_bit : {0, 1}
        The bit value that a positive LLR (and a positive prior) stands for.

    Attributes
    ----------
    constellation, rule, output, positive_bit
        As given.
    dtype : numpy.dtype
        Of the result.
    family : {"fold", "boxes", "points"}
        The kernels in use.
    boxes : int
        Number of boxes; 0 for "points".

    Raises
    ------
    TypeError, ValueError
        If an argument is of the wrong type or value, or the rule is not
        available for the constellation.

    Notes
    -----
    Immutable and safe to share between threads; comparable, hashable,
    picklable. The same bits come out at every instruction-set level, on every
    machine, for any split of the data and any number of threads.

    Examples
    --------
    >>> import numpy as np, pydemap
    >>> demap = pydemap.SoftDemapper(pydemap.square_qam(16), rule="max-log")
    >>> demap(np.array([0.3 + 0.9j]), 0.1).round(3)
    array([[ -3.795,  -4.205, -14.768,   3.384]], dtype=float32)
    """

    __slots__ = (
        "constellation", "rule", "output", "positive_bit", "dtype", "family", "boxes",
        "_plan", "_memory", "_call", "_real", "_pointer", "_settings",
    )  # fmt: skip

    constellation: Constellation
    rule: Rule
    output: Literal["float32", "float64"] | Word
    positive_bit: int
    dtype: np.dtype[Any]
    family: str
    boxes: int
    _plan: Any
    _memory: Any
    _call: Any
    _real: np.dtype[Any]
    _pointer: Any
    _settings: tuple[Any, Any]

    def __init__(
        self,
        constellation: Constellation,
        *,
        rule: Rule = "exact",
        output: Literal["float32", "float64"] | Word = "float32",
        positive_bit: int = 0,
    ) -> None:
        _check_constellation(constellation)
        if not isinstance(rule, str) or rule not in _RULES:
            raise ValueError(f"rule must be one of {', '.join(map(repr, _RULES))}, got {rule!r}")
        if not isinstance(output, Word) and not (
            isinstance(output, str) and output in ("float32", "float64")
        ):
            raise ValueError(f"output must be 'float32', 'float64' or a pydemap.Word, got {output!r}")
        if positive_bit not in (0, 1):
            raise ValueError(f"positive_bit must be 0 or 1, got {positive_bit!r}")

        points = np.ascontiguousarray(constellation.points, np.complex128)
        labels = np.ascontiguousarray(constellation.labels, np.uint32)
        nbytes = lib.pdm_plan_bytes(len(points))
        memory = ffi.new("double[]", nbytes // 8)
        plan = ffi.cast("pdm_plan *", memory)
        where = ffi.new("size_t *")
        status = lib.pdm_plan_init(
            plan, nbytes, ffi.from_buffer("double[]", points), ffi.from_buffer("uint32_t[]", labels),
            len(points), where,
        )  # fmt: skip
        if status:
            raise ValueError(f"constellation point {where[0]}: {_text(status)}")
        family = _FAMILIES[lib.pdm_plan_family(plan)]
        if rule == "linear" and family != "fold":
            raise ValueError(
                "rule 'linear' needs a square or rectangular grid with Gray labels on each axis; "
                f"this constellation is of the family {family!r}"
            )

        if isinstance(output, Word):
            self._set("dtype", output.dtype)
            self._set("_call", lib.pdm_demap_i8 if output.bits <= 8 else lib.pdm_demap_i16)
        else:
            self._set("dtype", np.dtype(output))
            self._set("_call", lib.pdm_demap_f64 if output == "float64" else lib.pdm_demap_f32)
        self._set("constellation", constellation)
        self._set("rule", rule)
        self._set("output", output)
        self._set("positive_bit", int(positive_bit))
        self._set("family", family)
        self._set("boxes", lib.pdm_plan_boxes(plan))
        self._set("_plan", plan)
        self._set("_memory", memory)
        self._set("_real", np.dtype(np.float64 if output == "float64" else np.float32))
        self._set("_pointer", ffi.typeof(f"{_C_TYPES[self.dtype.name]}[]"))
        self._set("_settings", tuple(self._make_settings(extrinsic) for extrinsic in (0, 1)))

    def _set(self, name: str, value: object) -> None:
        object.__setattr__(self, name, value)

    def __setattr__(self, name: str, value: object) -> None:
        raise AttributeError(f"SoftDemapper is immutable; make a new one with another {name}")

    def __delattr__(self, name: str) -> None:
        raise AttributeError("SoftDemapper is immutable")

    def _make_settings(self, extrinsic: int) -> Any:
        word = self.output if isinstance(self.output, Word) else Word(2, 1.0)
        return ffi.new(
            "pdm_settings *", (_RULES[self.rule], extrinsic, self.positive_bit, word.bits, word.step)
        )

    def _key(self) -> tuple[Any, ...]:
        return (self.constellation, self.rule, self.output, self.positive_bit)

    def __eq__(self, other: object) -> bool:
        return self._key() == other._key() if isinstance(other, SoftDemapper) else NotImplemented

    def __hash__(self) -> int:
        return hash(self._key())

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuild, self._key()

    def __repr__(self) -> str:
        more = ", positive_bit=1" if self.positive_bit else ""
        return f"SoftDemapper({self.constellation!r}, rule={self.rule!r}, output={self.output!r}{more})"

    def __call__(
        self,
        y: npt.ArrayLike,
        n0: npt.ArrayLike,
        *,
        gain: npt.ArrayLike | None = None,
        prior: npt.ArrayLike | None = None,
        extrinsic: bool = False,
        out: npt.NDArray[Any] | None = None,
        threads: int = 1,
    ) -> npt.NDArray[Any]:
        """LLRs of received symbols.

        Parameters
        ----------
        y : array_like of complex64 or complex128, shape (...)
            Received symbols, of any shape and strides.
        n0 : array_like of real numbers
            Noise variance E|w|^2, the total over both dimensions, in the units
            of ``|y|^2``; a scalar or broadcastable to the shape of `y`. Finite
            and > 0.
        gain : array_like of real or complex numbers, optional
            Channel gain h, a scalar or broadcastable to the shape of `y`;
            1 if left out.
        prior : array_like of real numbers, optional
            LLRs known beforehand, broadcastable to (..., n), of the sign of the
            output (in LLR units, for words too).
        extrinsic : bool
            Take the prior off the result again.
        out : ndarray of shape (..., n) and of the output's dtype, optional
            C-contiguous, aligned and writeable; filled and returned. It may be the
            `prior` array itself, and must not overlap any other input.
        threads : int
            Number of threads for large arrays; the result does not depend on it.

        Returns
        -------
        ndarray of shape (..., n)
            One LLR or word a bit, b0 first. NaN (0 in words) for all bits of a
            symbol whose `y` or `gain` is not finite or whose prior holds a NaN;
            the prior, or 0, where the gain is 0.

        Raises
        ------
        TypeError
            If an argument is of the wrong type.
        ValueError
            If an N0 is not finite and > 0 (the message names the first such
            index), shapes do not broadcast, or `out` does not fit. Nothing has
            been written to `out` then.
        """
        real = self._real
        samples = self._samples(y)
        shape = samples.shape
        result_shape = (*shape, self.constellation.bits_per_symbol)
        count = samples.size

        noise_given = noise = _plain("n0", n0)
        if noise.dtype.kind not in "fiu":
            raise TypeError(f"n0 must be real numbers > 0, got dtype {noise.dtype}")
        noise = _spread("n0", noise, shape)
        noise_real = _as_positive_real(noise, real)
        if count == 0 and not (np.isfinite(noise_given) & (noise_given > 0)).all():
            raise _bad_noise(n0)
        h = None if gain is None else self._gains(gain, shape)
        known = None
        if prior is not None:
            known = _plain("prior", prior)
            if known.dtype.kind not in "fiu":
                raise TypeError(f"prior must be real numbers (LLRs), got dtype {known.dtype}")
            with np.errstate(over="ignore"):
                known = _ready(np.broadcast_to(_spread("prior", known, result_shape), result_shape), real)
        if out is None:
            result = np.empty(result_shape, self.dtype)
        else:
            self._check_out(out, result_shape, y=y, n0=n0, gain=gain, prior=prior)
            result = out
        if not isinstance(extrinsic, bool | np.bool_):
            raise TypeError(f"extrinsic must be True or False, got {extrinsic!r}")
        if isinstance(threads, bool) or not isinstance(threads, int | np.integer) or threads < 1:
            raise ValueError(f"threads must be an integer >= 1, got {threads!r}")

        pointer = _DOUBLE_P if real == np.float64 else _FLOAT_P
        y_p = ffi.from_buffer(pointer, samples)
        noise_p = ffi.from_buffer(pointer, noise_real)
        gain_p = ffi.NULL if h is None else ffi.from_buffer(pointer, h)
        prior_p = ffi.NULL if known is None else ffi.from_buffer(pointer, known)
        out_p = ffi.from_buffer(self._pointer, result, True)
        settings = self._settings[bool(extrinsic)]
        gains = 0 if h is None else h.size
        where = ffi.new("size_t *")

        def run(first: int, last: int) -> int:
            n = result_shape[-1]
            return int(
                self._call(
                    self._plan,
                    settings,
                    last - first,
                    y_p + 2 * first,
                    noise_p + (first if noise_real.size > 1 else 0),
                    1 if noise_real.size == 1 else last - first,
                    gain_p + (2 * first if gains > 1 else 0) if gains else gain_p,
                    1 if gains == 1 else last - first,
                    prior_p if known is None else prior_p + n * first,
                    out_p + n * first,
                    where,
                )  # fmt: skip
            )

        parts = min(int(threads), count // _FEWEST_SYMBOLS_A_THREAD)
        if parts > 1:
            # Before any thread writes: a bad N0 anywhere must leave out untouched.
            if not (np.isfinite(noise_real) & (noise_real > 0)).all():
                raise _bad_noise(n0)
            edges = [count * i // parts for i in range(parts + 1)]
            with ThreadPoolExecutor(parts) as pool:
                status = max(pool.map(run, edges[:-1], edges[1:]))
        else:
            status = run(0, count)
        if status == lib.PDM_BAD_NOISE:
            raise _bad_noise(n0)
        if status:
            raise RuntimeError(_text(status))
        return result

    def slice(self, y: npt.ArrayLike, *, gain: npt.ArrayLike | None = None) -> npt.NDArray[np.uint16]:
        """Hard decisions: the label of the point nearest to y / h.

        Parameters
        ----------
        y : array_like of complex64 or complex128, shape (...)
            Received symbols.
        gain : array_like, optional
            As in a call.

        Returns
        -------
        ndarray of uint16, shape (...)
            Labels. Where several points are equally near, one of them; where
            `y` or `gain` is not finite, or the gain is 0, label 0.

        Raises
        ------
        TypeError, ValueError
            As in a call.
        """
        samples = self._samples(y)
        result = np.empty(samples.shape, np.uint16)
        h = None if gain is None else self._gains(gain, samples.shape)
        pointer, call = (
            (_DOUBLE_P, lib.pdm_slice_f64) if self._real == np.float64 else (_FLOAT_P, lib.pdm_slice_f32)
        )
        gain_p = ffi.NULL if h is None else ffi.from_buffer(pointer, h)
        status = call(
            self._plan, samples.size, ffi.from_buffer(pointer, samples), gain_p, 0 if h is None else h.size,
            ffi.from_buffer("uint16_t[]", result, True),
        )  # fmt: skip
        if status:
            raise RuntimeError(_text(status))
        return result

    def _samples(self, y: npt.ArrayLike) -> npt.NDArray[Any]:
        samples = _plain("y", y)
        if samples.dtype.kind != "c" or samples.dtype.itemsize > 16:
            raise TypeError(f"y must be complex64 or complex128, got dtype {samples.dtype}")
        return _as_complex(samples, self._real)

    def _gains(self, gain: npt.ArrayLike, shape: tuple[int, ...]) -> npt.NDArray[Any]:
        h = _plain("gain", gain)
        if h.dtype.kind not in "cfiu":
            raise TypeError(f"gain must be real or complex numbers, got dtype {h.dtype}")
        return _as_complex(_spread("gain", h, shape), self._real)

    def _check_out(self, out: npt.NDArray[Any], shape: tuple[int, ...], **inputs: Any) -> None:
        if not isinstance(out, np.ndarray):
            raise TypeError(f"out must be a numpy array, got {type(out).__name__}")
        if out.dtype != self.dtype:
            raise TypeError(f"out must have dtype {self.dtype}, got {out.dtype}")
        if out.shape != shape:
            raise ValueError(f"out must have shape {shape}, got {out.shape}")
        if not out.flags.carray:
            raise ValueError("out must be C-contiguous, aligned and writeable")
        for name, given in inputs.items():
            array = np.asarray(given)
            if not np.may_share_memory(out, array):
                continue
            same = array.shape == out.shape and array.dtype == out.dtype and array.strides == out.strides
            if not (name == "prior" and same and array.ctypes.data == out.ctypes.data):
                raise ValueError(f"out overlaps {name}; give it memory of its own")


_C_TYPES = {"float32": "float", "float64": "double", "int8": "int8_t", "int16": "int16_t"}


def _rebuild(constellation: Constellation, rule: Rule, output: Any, positive_bit: int) -> SoftDemapper:
    return SoftDemapper(constellation, rule=rule, output=output, positive_bit=positive_bit)


def _check_constellation(constellation: object) -> None:
    if not isinstance(constellation, Constellation):
        raise TypeError(f"constellation must be a pydemap.Constellation, got {type(constellation).__name__}")


def _text(status: int) -> str:
    return str(ffi.string(lib.pdm_status_text(status)).decode())


def _plain(name: str, value: npt.ArrayLike) -> npt.NDArray[Any]:
    """`value` as an array; a mask would be lost in silence."""
    if isinstance(value, np.ma.MaskedArray):
        raise TypeError(f"{name} must not be a masked array; fill it first")
    return np.asarray(value)


def _spread(name: str, array: npt.NDArray[Any], shape: tuple[int, ...]) -> npt.NDArray[Any]:
    """`array` broadcast to `shape`, or as it is if one value serves for all; an error names the argument."""
    if array.size == 1 and array.ndim <= len(shape):
        return array
    try:
        return np.broadcast_to(array, shape)
    except ValueError:
        raise ValueError(f"{name} of shape {array.shape} does not broadcast to {shape}") from None


def _ready(array: npt.NDArray[Any], dtype: np.dtype[Any]) -> npt.NDArray[Any]:
    """`array` as `dtype`, C-contiguous and aligned, as C code needs it."""
    result = np.asarray(array, dtype, order="C")
    return result if result.flags.aligned else result.copy()


def _hold(converted: npt.NDArray[Any], given: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Finite values that a narrower type turned infinite become its largest value."""
    lost = np.isinf(converted) & np.isfinite(given)
    if lost.any():
        converted = converted.copy()
        converted[lost] = np.copysign(np.finfo(converted.dtype).max, converted[lost])
    return converted


def _as_complex(array: npt.NDArray[Any], real: np.dtype[Any]) -> npt.NDArray[Any]:
    """C-contiguous complex array whose parts are of type `real`."""
    wanted = np.dtype(np.complex128 if real == np.float64 else np.complex64)
    if array.dtype == wanted:
        return _ready(array, wanted)
    with np.errstate(over="ignore"):
        result = _ready(array, wanted)
    if not np.isfinite(result).all():
        parts = np.ascontiguousarray(array, np.complex128).view(np.float64)
        result = _hold(np.ascontiguousarray(result).view(real), parts).view(wanted).reshape(array.shape)
    return result


def _as_positive_real(array: npt.NDArray[Any], real: np.dtype[Any]) -> npt.NDArray[Any]:
    """C-contiguous array of type `real`; positive numbers stay finite and > 0."""
    if array.dtype == real:
        return _ready(array, real)
    with np.errstate(over="ignore", under="ignore"):
        result = _ready(array, real)
    vanished = (result == 0) & (array > 0)
    if vanished.any():
        result = np.where(vanished, np.finfo(real).smallest_subnormal, result)
    return _hold(result, array)


def _bad_noise(n0: npt.ArrayLike) -> ValueError:
    noise = np.asarray(n0)
    bad = np.argwhere(~(np.isfinite(noise) & (noise > 0)))[0]
    index = f"[{', '.join(map(str, bad))}]" if noise.ndim else ""
    return ValueError(f"n0{index} must be finite and > 0, got {noise[tuple(bad)]!s}")


def soft_symbols(
    constellation: Constellation, llr: npt.ArrayLike, *, positive_bit: int = 0
) -> tuple[npt.NDArray[np.complex128], npt.NDArray[np.float64]]:
    """Expected symbol and its variance, given LLRs: the way back, for turbo equalisers.

    The bits are taken as independent, each with the probabilities that its LLR
    tells: ``P(b_k = 0) = 1 / (1 + exp(-llr_k))``.

    Parameters
    ----------
    constellation : Constellation
        Labelled points, M of them with n bits each.
    llr : array_like of real numbers, shape (..., n)
        LLRs (not words: multiply those by their step), b0 first.
    positive_bit : {0, 1}
        The bit value that a positive LLR stands for.

    Returns
    -------
    mean : ndarray of complex128, shape (...)
        Expected symbol.
    variance : ndarray of float64, shape (...)
        Expected squared distance from it, over both dimensions. NaN LLRs give
        NaN.

    Raises
    ------
    TypeError, ValueError
        If `llr` is not real or its last axis is not n long.

    Notes
    -----
    Source: M. Tuechler, A. C. Singer, R. Koetter, "Minimum mean squared error
    equalization using a priori information", IEEE Trans. Signal Processing
    50(3), March 2002 (from memory).
    """
    _check_constellation(constellation)
    values = _plain("llr", llr)
    n = constellation.bits_per_symbol
    if values.dtype.kind not in "fiu":
        raise TypeError(f"llr must be real numbers, got dtype {values.dtype}")
    if values.ndim == 0 or values.shape[-1] != n:
        raise ValueError(f"llr must have shape (..., {n}) for {n} bits a symbol, got {values.shape}")
    if positive_bit not in (0, 1):
        raise ValueError(f"positive_bit must be 0 or 1, got {positive_bit!r}")
    flat = values.reshape(-1, n).astype(np.float64)
    if positive_bit:
        flat = -flat
    with np.errstate(over="ignore"):
        probability = np.stack([1 / (1 + np.exp(-flat)), 1 / (1 + np.exp(flat))], axis=-1)
    points = constellation.points[np.argsort(constellation.labels)]
    mean = np.empty(len(flat), np.complex128)
    variance = np.empty(len(flat))
    rows = max(1, 2**20 // constellation.order)
    for first in range(0, len(flat), rows):
        part = slice(first, first + rows)
        weight = np.ones((len(flat[part]), 1))
        for k in range(n):
            weight = (weight[:, :, None] * probability[part, k, None, :]).reshape(len(weight), -1)
        mean[part] = weight @ points
        variance[part] = np.einsum("ij,ij->i", weight, np.abs(points - mean[part, None]) ** 2)
    return mean.reshape(values.shape[:-1]), variance.reshape(values.shape[:-1])


def estimate_noise_variance(
    y: npt.ArrayLike,
    constellation: Constellation,
    *,
    known: npt.ArrayLike | None = None,
    gain: npt.ArrayLike | None = None,
    max_samples: int | None = None,
) -> float:
    """Noise variance N0 of received symbols, blind or from known symbols.

    Parameters
    ----------
    y : array_like of complex numbers, shape (...)
        Received symbols ``y = h s + w``.
    constellation : Constellation
        The points sent, each as often as any other.
    known : array_like of complex numbers, optional
        The symbols sent, broadcastable to `y`. The estimate is then the mean of
        ``|y - h known|^2``; without them, the maximum-likelihood value found by
        expectation maximisation.
    gain : array_like of real or complex numbers, optional
        Channel gain h, broadcastable to `y`; 1 if left out.
    max_samples : int, optional
        Blind only: look at no more than so many samples, evenly picked. Left
        out, as many as keep one iteration near 2^22 distances, at least 1024.

    Returns
    -------
    float
        N0, the total over both dimensions.

    Raises
    ------
    TypeError, ValueError
        If `y` is not complex, is empty, holds no finite sample or has no power,
        or shapes do not broadcast.

    Notes
    -----
    The blind estimate's relative standard deviation is about 1/sqrt(samples)
    at high Es/N0 and larger below the Es/N0 at which decisions get unreliable.
    Expectation maximisation: A. P. Dempster, N. M. Laird, D. B. Rubin, J. Royal
    Statistical Society B 39(1), 1977 (from memory).
    """
    _check_constellation(constellation)
    samples = _plain("y", y)
    if samples.dtype.kind != "c":
        raise TypeError(f"y must be complex, got dtype {samples.dtype}")
    h = np.asarray(1.0 if gain is None else gain)
    if h.dtype.kind not in "cfiu":
        raise TypeError(f"gain must be real or complex numbers, got dtype {h.dtype}")
    h = np.broadcast_to(_spread("gain", h, samples.shape), samples.shape)
    sent = np.asarray(0.0 if known is None else known)
    if sent.dtype.kind not in "cfiu":
        raise TypeError(f"known must be complex symbols, got dtype {sent.dtype}")
    sent = np.broadcast_to(_spread("known", sent, samples.shape), samples.shape)
    limit = max(1024, 2**22 // constellation.order) if max_samples is None else max_samples
    if isinstance(limit, bool) or not isinstance(limit, int | np.integer) or limit < 1:
        raise ValueError(f"max_samples must be an integer >= 1, got {max_samples!r}")
    good = np.isfinite(samples) & np.isfinite(h) & np.isfinite(sent)
    if not good.any():
        raise ValueError("y must hold at least one finite sample (with finite gain and known symbol)")
    if known is not None:
        return float(np.mean(np.abs(samples[good] - h[good] * sent[good]) ** 2))

    received, h = samples[good].astype(np.complex128), h[good]
    pick = np.unique(np.linspace(0, len(received) - 1, min(limit, len(received))).astype(np.intp))
    received, h = received[pick], h[pick]
    rows = max(1, 2**20 // constellation.order)
    # The mean distance to all points is far too large, the one to the nearest
    # point too small; from above, expectation maximisation walks down safely.
    with np.errstate(over="ignore", under="ignore"):
        power, gain_power = (float(np.mean(np.abs(x) ** 2)) for x in (received, h))
    for name, value in (("y", power), ("gain", gain_power)):
        if not 1e-120 < value < 1e120:
            raise ValueError(f"{name} must have a mean power between 1e-120 and 1e120, got {value!r}")
    noise = max(power - constellation.mean_energy * gain_power, power * 1e-3)
    for _ in range(500):
        total = 0.0
        for first in range(0, len(received), rows):
            part = slice(first, first + rows)
            distance = np.abs(received[part, None] - h[part, None] * constellation.points) ** 2
            weight = np.exp((distance.min(axis=1, keepdims=True) - distance) / noise)
            total += float(np.sum(np.sum(weight * distance, axis=1) / np.sum(weight, axis=1)))
        update = max(total / len(received), power * 1e-15, 5e-324)
        if abs(update - noise) <= 1e-7 * noise:
            return update
        noise = update
    return noise


def isa() -> str:
    """Name of the instruction-set level in use: "v4", "v3" or "baseline"."""
    return str(ffi.string(lib.pdm_isa()).decode())


def available_isas() -> list[str]:
    """Names of the levels that this machine can run, fastest first."""
    names: list[str] = []
    while (name := lib.pdm_available_isa(len(names))) != ffi.NULL:
        names.append(ffi.string(name).decode())
    return names


def use_isa(name: str) -> None:
    """Use the named instruction-set level from now on; it never changes a result.

    Parameters
    ----------
    name : str
        One of `available_isas`, or "auto" for the fastest. The environment
        variable PYDEMAP_ISA does the same at import.

    Raises
    ------
    ValueError
        If this machine or build has no such level.
    """
    if not isinstance(name, str) or "\0" in name or lib.pdm_use_isa(name.encode()):
        levels = ", ".join(map(repr, ["auto", *available_isas()]))
        raise ValueError(f"instruction-set level must be one of {levels} here, got {name!r}")


def get_include() -> str:
    """Directory that holds pydemap.h; the C sources are in ../src beside it."""
    packaged = Path(__file__).parent / "csrc" / "include"
    return str(packaged if packaged.is_dir() else Path(__file__).parents[1] / "csrc" / "include")


if _level := os.environ.get("PYDEMAP_ISA"):
    try:
        use_isa(_level)
    except ValueError as error:
        raise ValueError(f"environment variable PYDEMAP_ISA: {error}") from None
