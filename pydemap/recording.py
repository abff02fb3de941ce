"""Files in and out: recorded symbols, gains and noise variances block by block, LLRs with a sidecar.

Read: SigMF recordings, raw interleaved files, NumPy ``.npy`` files, comma-separated text and, for raw
samples, standard input. Written: LLRs as ``.npy`` or raw, with ``<file>.json`` beside them that states
every convention. Whatever the length, only a block of it is in memory, and whatever happens, a target
appears whole or not at all.
"""

from __future__ import annotations

import errno
import hashlib
import json
import os
import secrets
import stat
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from itertools import count, islice
from pathlib import Path
from typing import Any, BinaryIO, Final, TypeVar

import numpy as np
from numpy.typing import NDArray

import pydemap
from pydemap.constellation import Constellation
from pydemap.demapper import SoftDemapper, Word, estimate_noise_variance

__all__ = [
    "BLOCK_SYMBOLS",
    "SAMPLE_TYPES",
    "RecordingError",
    "Stream",
    "demap_recording",
    "estimate_from_start",
    "open_gain",
    "open_noise_variance",
    "open_samples",
    "read_constellation",
    "replacing",
    "write_sigmf",
]

SAMPLE_TYPES: Final = ("cf32_le", "cf32_be", "cf64_le", "cf64_be", "ci16_le", "ci16_be")
"""Complex sample types read, by their SigMF names: I then Q as float32, float64 or int16, little- or
big-endian. Integers become value / 32768, so that full scale is 1."""

BLOCK_SYMBOLS: Final = 1 << 18
"""Symbols demapped at a time, and those from which an estimate of the noise variance picks."""

# At 16 bits a symbol in float64 such a block of LLRs takes 32 MiB, and the calls' own cost is lost in it.
# A constellation without structure costs M operations a symbol, so its blocks shrink to keep each call
# about a second long: the progress bar moves and Ctrl-C is heard.
_BLOCK_OPERATIONS = 1 << 28

_RAW_REAL_TYPES: Final = {".f32": "<f4", ".f64": "<f8"}

# No line of numbers is longer; a binary file that is called .csv may have no line end at all.
_LONGEST_LINE = 4096

_T = TypeVar("_T")


class RecordingError(ValueError):
    """A file cannot be read or written as asked; the message names the file and what was expected of it."""


class Stream(ABC):
    """Numbers from a file, one a symbol, read block by block in bounded memory.

    A context manager: leaving it closes the file. Not for sharing between threads.

    Attributes
    ----------
    name : str
        The file, as messages give it.
    dtype : numpy.dtype
        Type of the blocks, in the machine's byte order: complex64 or complex128, float32 or float64.
    length : int or None
        Numbers in the whole stream. None where only the end tells: text, pipes.
    format : str
        What kind of file it is, in words.
    paths : tuple of pathlib.Path
        The files that are read.
    """

    def __init__(
        self,
        file: BinaryIO,
        paths: Sequence[Path],
        format: str,
        dtype: np.dtype[Any],
        length: int | None,
    ) -> None:
        self.name = str(paths[0]) if paths else "standard input"
        self.paths = tuple(paths)
        self.format = format
        self.dtype = dtype
        self.length = length
        self._file = file
        self._pending: NDArray[Any] = np.empty(0, dtype)

    def read(self, count: int) -> NDArray[Any]:
        """Return the next ``count`` numbers, fewer only where the stream ends, none after it.

        Raises
        ------
        RecordingError
            The file cannot be read, ends inside a number, or holds something else.
        """
        block, self._pending = self._pending[:count], self._pending[count:]
        if len(block) < count:
            more = self._next(count - len(block))
            block = np.concatenate([block, more]) if len(block) else more
        return block

    def peek(self, count: int) -> NDArray[Any]:
        """Return what ``read(count)`` would, and leave it to be read."""
        if len(self._pending) < count:
            self._pending = self.read(count)
        return self._pending[:count]

    @abstractmethod
    def _next(self, count: int) -> NDArray[Any]:
        """Read up to ``count`` numbers from the file, fewer only where it ends."""

    def __enter__(self) -> Stream:
        return self

    def __exit__(self, *_: object) -> None:
        self._file.close()


class _BinaryStream(Stream):
    """Numbers stored one after another, each of one (real) or two (complex) values of the type ``stored``."""

    def __init__(
        self,
        file: BinaryIO,
        paths: Sequence[Path],
        format: str,
        stored: np.dtype[Any],
        dtype: np.dtype[Any],
        *,
        length: int | None = None,
        sha512: str | None = None,
    ) -> None:
        super().__init__(file, paths, format, dtype, length)
        self._stored = stored
        self._size = stored.itemsize * (2 if dtype.kind == "c" else 1)
        self._done = 0
        self._sha512 = sha512
        self._digest = hashlib.sha512()
        left = _bytes_left(file)
        if left is None:
            return
        if length is None:
            self.length, rest = divmod(left, self._size)
            if rest:
                raise self._cut(left)
        elif left != length * self._size:
            raise RecordingError(
                f"{self.name}: {left} bytes of data; its header promises {length} numbers "
                f"of {self._size} bytes each"
            )

    def _cut(self, length_bytes: int) -> RecordingError:
        return RecordingError(
            f"{self.name}: {length_bytes} bytes are no whole number of values of {self._size} bytes each "
            f"({self.format}): the file is cut short, or of another type"
        )

    def _next(self, count: int) -> NDArray[Any]:
        if self.length is not None:
            count = min(count, self.length - self._done)
        with _reading(self.name):
            data = self._file.read(count * self._size)
        numbers, rest = divmod(len(data), self._size)
        if rest:
            raise self._cut(self._done * self._size + len(data))
        self._done += numbers
        if self.length is not None and numbers < count:
            raise RecordingError(f"{self.name}: ended after {self._done} of {self.length} numbers")
        if self._sha512 is not None:
            self._digest.update(data)
            ended = numbers < count or self._done == self.length
            if ended and self._digest.hexdigest() != self._sha512.lower():
                raise RecordingError(f"{self.name}: its SHA-512 is not the core:sha512 of its metadata")
        values = np.frombuffer(data, self._stored)
        if self._stored.kind == "i":
            values = values.astype(np.float32) * np.float32(2.0**-15)
        return values.astype(values.dtype.newbyteorder("="), copy=False).view(self.dtype)


class _TextStream(Stream):
    """Numbers in lines of comma-separated text."""

    def __init__(
        self, file: BinaryIO, path: Path, parse: Callable[[Sequence[str]], complex], dtype: np.dtype[Any]
    ) -> None:
        super().__init__(file, (path,), "csv", dtype, None)
        self._numbers = _rows(file, self.name, parse)

    def _next(self, count: int) -> NDArray[Any]:
        return np.fromiter(islice(self._numbers, count), self.dtype)


def open_samples(path: str | os.PathLike[str], sample_type: str | None = None) -> Stream:
    """Open a file of complex numbers, one a symbol: received samples, or channel gains of that kind.

    Parameters
    ----------
    path : str or path-like
        One of

        * a SigMF recording (specification 1.x): either of its two files, or their common stem;
        * ``.npy``: complex64 or complex128, one dimension, either byte order;
        * ``.csv``: lines ``re,im``, or one complex number such as ``0.5-0.25j`` a line; blank lines,
          lines that begin with ``#`` and a line of headings are passed over;
        * raw: any other name, I and Q interleaved without a header;
        * ``-``: raw samples from standard input.
    sample_type : str, optional
        One of `SAMPLE_TYPES`, for raw files alone. A raw file whose name ends in ``.`` and a sample type
        needs none.

    Returns
    -------
    Stream
        Blocks of complex64 (from float32 and int16) or complex128 (from float64 and text).

    Raises
    ------
    RecordingError
        No such file; metadata missing, malformed or of an unsupported type; a length that is no whole
        number of samples.
    """
    if str(path) == "-":
        if sample_type is None:
            raise RecordingError("standard input: name its sample type, one of " + ", ".join(SAMPLE_TYPES))
        return _open_raw_samples(None, sample_type)
    path = Path(path)
    stem = path.with_suffix("") if path.suffix in (".sigmf-meta", ".sigmf-data") else path
    recording = [Path(f"{stem}.sigmf-meta"), Path(f"{stem}.sigmf-data")]
    is_sigmf = stem != path or (not os.path.exists(path) and any(map(os.path.exists, recording)))
    if sample_type is not None and (is_sigmf or path.suffix in (".npy", ".csv")):
        raise RecordingError(
            f"{path}: states its own type; a sample type is for raw files, got {sample_type}"
        )
    if is_sigmf:
        return _open_sigmf(*recording)
    if path.suffix == ".sigmf":
        raise RecordingError(
            f"{path}: is a SigMF archive; expected its .sigmf-meta and .sigmf-data, unpacked"
        )
    if path.suffix == ".npy":
        return _open_npy(path, np.complex64, np.complex128)
    if path.suffix == ".csv":
        return _opened(path, lambda file: _TextStream(file, path, _complex_row(), np.dtype(np.complex128)))
    suffix = path.suffix.removeprefix(".")
    if sample_type is None and suffix not in SAMPLE_TYPES:
        _require_file(path, "a SigMF recording, a .npy or .csv file, or raw samples of a named type")
        raise RecordingError(
            f"{path}: a raw file needs its sample type named, one of {', '.join(SAMPLE_TYPES)}; "
            "without one, expected SigMF (.sigmf-meta, .sigmf-data), .npy or .csv"
        )
    return _open_raw_samples(path, sample_type or suffix)


def open_gain(path: str | os.PathLike[str]) -> Stream:
    """Open a file of channel gains, one a symbol, complex or real.

    Parameters
    ----------
    path : str or path-like
        Complex gains as `open_samples` takes samples, or real ones: ``.npy`` (float32 or float64, one
        dimension), ``.csv`` (one number a line), or raw little-endian ``.f32`` or ``.f64``.

    Returns
    -------
    Stream
        Blocks of complex64 or complex128, or of float32 or float64. Real gains in text are complex128.

    Raises
    ------
    RecordingError
        As `open_samples` does.
    """
    path = Path(path)
    if path.suffix == ".npy":
        return _open_npy(path, np.complex64, np.complex128, np.float32, np.float64)
    if path.suffix in _RAW_REAL_TYPES:
        return _open_raw_real(path)
    return open_samples(path)


def open_noise_variance(path: str | os.PathLike[str]) -> Stream:
    """Open a file of noise variances, one a symbol.

    Parameters
    ----------
    path : str or path-like
        ``.npy`` (float32 or float64, one dimension), ``.csv`` (one number a line, otherwise as for samples),
        or raw little-endian ``.f32`` or ``.f64``.

    Returns
    -------
    Stream
        Blocks of float32 or float64.

    Raises
    ------
    RecordingError
        No such file, another kind of file, or a length that is no whole number of values.
    """
    path = Path(path)
    if path.suffix == ".npy":
        return _open_npy(path, np.float32, np.float64)
    if path.suffix == ".csv":
        return _opened(path, lambda file: _TextStream(file, path, _real_row, np.dtype(np.float64)))
    if path.suffix in _RAW_REAL_TYPES:
        return _open_raw_real(path)
    expected = "noise variances in a .npy, .csv, .f32 or .f64 file"
    _require_file(path, expected)
    raise RecordingError(f"{path}: expected {expected}")


def read_constellation(path: str | os.PathLike[str]) -> Constellation:
    """Read a constellation of the user's own.

    Parameters
    ----------
    path : str or path-like
        ``.csv``: lines ``re,im,label``, the label a decimal integer or, after ``0b``, its bits; comments and
        headings as for samples. ``.npz``: arrays ``points`` (M, complex) and ``labels`` (M, integers).

    Raises
    ------
    RecordingError
        No such file, another kind of file, or points and labels that `Constellation` refuses.
    """
    path = Path(path)
    if path.suffix == ".csv":
        with _reading(str(path)), open(path, "rb") as file:
            rows = list(_rows(file, str(path), _labelled_row))
        points = np.array([point for point, _ in rows], np.complex128)
        labels = np.array([label for _, label in rows], np.int64)
    elif path.suffix == ".npz":
        try:
            with _reading(str(path)), np.load(path, allow_pickle=False) as arrays:
                points, labels = arrays["points"], arrays["labels"]
        except RecordingError:
            raise
        except Exception as problem:  # a damaged file makes zipfile, zlib and NumPy raise this and that
            raise RecordingError(
                f"{path}: expected a .npz file of arrays points and labels ({problem})"
            ) from problem
    else:
        expected = "labelled points in a .csv or .npz file"
        _require_file(path, expected)
        raise RecordingError(f"{path}: expected {expected}")
    try:
        return Constellation(points, labels)
    except (TypeError, ValueError) as problem:
        raise RecordingError(f"{path}: {problem}") from problem


def demap_recording(
    demapper: SoftDemapper,
    samples: Stream,
    target: str | os.PathLike[str],
    *,
    noise_variance: float | Stream,
    noise_origin: str = "given",
    constellation_name: str | None = None,
    gain: Stream | None = None,
    threads: int = 1,
    progress: Callable[[int], object] | None = None,
) -> dict[str, Any]:
    """Demap a stream of samples into a file of LLRs, and write beside it what they mean.

    The LLRs are those of one call of ``demapper`` on all samples, to the bit.

    Parameters
    ----------
    demapper : SoftDemapper
        Constellation, rule, output type and sign.
    samples : Stream
        Received samples, from `open_samples`; read to the end.
    target : str or path-like
        A name that ends in ``.npy`` gives an array of shape (symbols, n) in C order; any other name the same
        values raw, little-endian, without a header. ``<target>.json`` beside it is the sidecar. Files of
        these names are replaced once the new ones are complete, and not touched before.
    noise_variance : float or Stream
        N0 = E|w|^2 over both dimensions, one for all symbols or one each, from `open_noise_variance`.
    noise_origin : str, optional
        Where the noise variance comes from, for the sidecar.
    constellation_name : str, optional
        What the constellation is called, for the sidecar; its points and labels stand there in any case.
    gain : Stream, optional
        Channel gain of each symbol, complex or real, from `open_gain`.
    threads : int, optional
        Threads that share each block.
    progress : callable, optional
        Called after each block with the number of symbols in it.

    Returns
    -------
    dict
        What the sidecar states.

    Raises
    ------
    RecordingError
        The target cannot be written, the streams differ in length, a noise variance is not finite and
        positive, or a stream cannot be read to its end. Neither target nor sidecar is then written.
    """
    target = Path(target)
    sidecar = Path(f"{target}.json")
    if target.suffix in (".csv", ".json", ".npz", ".sigmf-data", ".sigmf-meta"):
        raise RecordingError(f"{target}: expected a name in .npy, or one that promises no other format")
    noise = noise_variance if isinstance(noise_variance, Stream) else None
    companions = [stream for stream in (noise, gain) if stream is not None]
    for stream in (samples, *companions):
        for path in stream.paths:
            if any(_same_file(path, written) for written in (target, sidecar)):
                raise RecordingError(f"{path}: is read in this run and would be replaced by its output")
    for stream in companions:
        if stream.length is not None and samples.length is not None:
            _require_equal_lengths(stream, stream.length, samples, samples.length)

    constellation = demapper.constellation
    stored = demapper.dtype.newbyteorder("<")
    block = BLOCK_SYMBOLS
    if demapper.family == "points":
        block = min(block, _BLOCK_OPERATIONS // constellation.order)
    is_npy = target.suffix == ".npy"
    digest = hashlib.sha256()
    done = 0
    n0: Any = noise_variance
    with replacing(target, sidecar) as (data_file, sidecar_file):
        if is_npy:  # in the place of the header, which the end of the stream completes
            data_file.write(_npy_header(stored, (0, constellation.bits_per_symbol)))
        while len(y := samples.read(block)):
            if noise is not None:
                n0 = _companion_block(noise, samples, len(y), done)
                _require_noise_variance(noise, n0, done)
            h = None if gain is None else _companion_block(gain, samples, len(y), done)
            llr = demapper(y, n0, gain=h, threads=threads).astype(stored, copy=False).reshape(-1)
            digest.update(llr.data)
            data_file.write(llr.data)
            done += len(y)
            if progress is not None:
                progress(len(y))
        for stream in companions:
            if rest := len(stream.read(1)):
                _require_equal_lengths(stream, done + rest, samples, done, about="at least ")
        if is_npy:
            data_file.seek(0)
            data_file.write(_npy_header(stored, (done, constellation.bits_per_symbol)))

        statement = {
            "written_by": f"pydemap {pydemap.__version__}",
            "data": {
                "file": target.name,
                "format": "npy" if is_npy else "raw, no header",
                "type": demapper.dtype.name,
                "byte_order": "little-endian",
                "shape": [done, constellation.bits_per_symbol],
                "layout": "symbol after symbol, within each b0 first",
                "sha256": digest.hexdigest(),
                "sha256_of": "the values alone, without the .npy header",
            },
            "symbols": done,
            **_llr_conventions(demapper),
            "channel": {
                "model": "y = h s + w, w circular complex Gaussian",
                "noise_variance": "N0 = E|w|^2 over both dimensions, N0/2 in each",
                "noise_origin": noise_origin,
                "noise_value": noise.name if noise else noise_variance,
                "gain": gain.name if gain else 1,
            },
            "samples": {"file": samples.name, "format": samples.format},
            "constellation": {
                "name": constellation_name or repr(constellation),
                "order": constellation.order,
                "bits_per_symbol": constellation.bits_per_symbol,
                "mean_energy": constellation.mean_energy,
                "points": [[point.real, point.imag] for point in constellation.points.tolist()],
                "labels": constellation.labels.tolist(),
            },
        }
        sidecar_file.write(_json_by_lines(statement))
    return statement


def estimate_from_start(
    samples: Stream, constellation: Constellation, *, gain: Stream | None = None
) -> tuple[float, str]:
    """Estimate the noise variance, blind, from a stream's next `BLOCK_SYMBOLS` symbols, left to be read.

    Of the symbols there that are finite, as are their gains, max(1024, 2^22 / M) are evenly picked, or all
    of fewer: the time does not grow with the order M of the constellation.

    Returns
    -------
    n0 : float
        The estimate.
    origin : str
        How many symbols it comes from, and of how many, for the sidecar.

    Raises
    ------
    RecordingError
        None of the symbols is finite, they have no power, there is a gain for only some of them, or a file
        cannot be read.
    """
    y = samples.peek(BLOCK_SYMBOLS)
    finite = np.isfinite(y)
    h = None
    if gain is not None:
        h = gain.peek(len(y))
        _require_equal_lengths(gain, len(h), samples, len(y))
        finite &= np.isfinite(h)
    most = max(1024, 2**22 // constellation.order)
    try:
        n0 = estimate_noise_variance(y, constellation, gain=h, max_samples=most)
    except ValueError as problem:
        raise RecordingError(f"{samples.name}: noise variance cannot be estimated: {problem}") from problem
    used = min(most, np.count_nonzero(finite))
    return n0, f"estimated from {used} of the first {len(y)} symbols, evenly picked"


def write_sigmf(
    stem: str | os.PathLike[str],
    samples: NDArray[np.complex64],
    *,
    fields: Mapping[str, object] | None = None,
    capture: Mapping[str, object] | None = None,
) -> None:
    """Write samples as a SigMF recording of type cf32_le: ``<stem>.sigmf-meta`` and ``<stem>.sigmf-data``.

    Parameters
    ----------
    stem : str or path-like
        Common name of both files.
    samples : ndarray of complex64, shape (symbols,)
    fields, capture : mapping, optional
        Further fields of the metadata's global object and of its one capture, such as
        ``core:sample_rate`` (Hz).

    Raises
    ------
    RecordingError
        A file cannot be written; neither is then there.
    """
    data = samples.astype("<c8")
    metadata = {
        "global": {
            "core:datatype": "cf32_le",
            "core:version": "1.2.0",
            "core:num_channels": 1,
            "core:sha512": hashlib.sha512(data.data).hexdigest(),
            **(fields or {}),
        },
        "captures": [{"core:sample_start": 0, **(capture or {})}],
        "annotations": [],
    }
    with replacing(Path(f"{stem}.sigmf-data"), Path(f"{stem}.sigmf-meta")) as (data_file, metadata_file):
        data_file.write(data.data)
        metadata_file.write(json.dumps(metadata, indent=4).encode() + b"\n")


@contextmanager
def replacing(*targets: Path) -> Iterator[list[BinaryIO]]:
    """Open a new file for each target; put them in place when the block ends well, remove them if not.

    The new files lie beside the targets, since a rename is whole only within a file system.

    Raises
    ------
    RecordingError
        A target or its directory cannot be written, or the disk is full.
    """
    places = [Path(os.path.realpath(target)) for target in targets]
    for target, place in zip(targets, places, strict=True):
        if not os.path.isdir(place.parent):
            raise RecordingError(f"{target}: cannot be written: {place.parent} is not a directory")
        if os.path.exists(place) and not os.path.isfile(place):
            raise RecordingError(f"{target}: cannot be written: it exists and is not a regular file")
    partial = [place.with_name(f".pydemap-{secrets.token_hex(8)}.partial") for place in places]
    files: list[BinaryIO] = []
    placed: list[Path] = []
    try:
        for path in partial:
            files.append(open(path, "xb"))
        yield files
        for file in files:  # a full disk may show only here
            file.close()
        for path, place in zip(partial, places, strict=True):
            os.replace(path, place)
            placed.append(place)
    except BaseException as problem:  # KeyboardInterrupt too: nothing half-written may stay
        for file in files:
            with suppress(OSError):
                file.close()
        for path in partial + placed:
            with suppress(OSError):
                path.unlink(missing_ok=True)
        if isinstance(problem, OSError):
            names = " and ".join(map(str, targets))
            raise RecordingError(f"{names}: cannot be written: {problem.strerror}") from problem
        raise


def _open_raw_samples(path: Path | None, sample_type: str) -> Stream:
    if sample_type not in SAMPLE_TYPES:
        raise RecordingError(f"sample type {sample_type!r}: expected one of {', '.join(SAMPLE_TYPES)}")
    paths = [path] if path else []
    return _opened(path, lambda file: _sample_stream(file, paths, "raw", sample_type))


def _open_raw_real(path: Path) -> Stream:
    stored = np.dtype(_RAW_REAL_TYPES[path.suffix])
    return _opened(
        path,
        lambda file: _BinaryStream(file, (path,), f"raw {stored.name}", stored, stored.newbyteorder("=")),
    )


def _open_npy(path: Path, *types: type[np.generic]) -> Stream:
    def stream(file: BinaryIO) -> Stream:
        try:
            version = np.lib.format.read_magic(file)
            if version == (1, 0):
                shape, _, stored = np.lib.format.read_array_header_1_0(file)
            else:
                shape, _, stored = np.lib.format.read_array_header_2_0(file)
        except ValueError as problem:
            raise RecordingError(f"{path}: is no .npy file ({problem})") from problem
        dtype = stored.newbyteorder("=")
        if dtype not in types:
            expected = " or ".join(np.dtype(type_).name for type_ in types)
            raise RecordingError(f"{path}: holds {stored}, expected {expected}")
        if len(shape) != 1:
            raise RecordingError(f"{path}: has shape {shape}, expected one dimension")
        value = stored if stored.kind == "f" else np.dtype(f"{stored.byteorder}f{stored.itemsize // 2}")
        return _BinaryStream(file, (path,), f"npy {dtype.name}", value, dtype, length=shape[0])

    return _opened(path, stream)


def _open_sigmf(metadata_path: Path, data_path: Path) -> Stream:
    if not os.path.exists(metadata_path):
        raise RecordingError(f"{metadata_path}: no such file; expected the metadata of {data_path}")
    try:
        with _reading(str(metadata_path)):
            metadata = json.loads(metadata_path.read_bytes())
    except (json.JSONDecodeError, RecursionError) as problem:
        raise RecordingError(f"{metadata_path}: is not valid JSON: {problem}") from problem

    def malformed(field: str, expected: str) -> RecordingError:
        return RecordingError(f"{metadata_path}: malformed SigMF metadata: expected {field} to be {expected}")

    fields = metadata.get("global") if isinstance(metadata, dict) else None
    if not isinstance(fields, dict):
        raise malformed("global", "an object")
    captures = metadata.get("captures", [])
    if not (isinstance(captures, list) and all(isinstance(capture, dict) for capture in captures)):
        raise malformed("captures", "an array of objects")
    sample_type = fields.get("core:datatype")
    if not isinstance(sample_type, str):
        raise malformed("core:datatype", "a string such as cf32_le")
    if sample_type not in SAMPLE_TYPES:
        raise RecordingError(
            f"{metadata_path}: core:datatype {sample_type} is not supported; "
            f"expected one of {', '.join(SAMPLE_TYPES)}"
        )
    channels = fields.get("core:num_channels", 1)
    if type(channels) is not int or channels < 1:
        raise malformed("core:num_channels", "a positive integer")
    if channels > 1:
        raise RecordingError(f"{metadata_path}: core:num_channels is {channels}; expected one channel")
    # Bytes that are no samples would silently be demapped as if they were.
    if fields.get("core:trailing_bytes") or any(capture.get("core:header_bytes") for capture in captures):
        raise RecordingError(f"{metadata_path}: core:header_bytes and core:trailing_bytes are not supported")
    dataset = fields.get("core:dataset", data_path.name)
    if not isinstance(dataset, str) or Path(dataset).name != dataset:
        raise malformed("core:dataset", "the name of a file in the same directory")
    sha512 = fields.get("core:sha512")
    if not isinstance(sha512, str | None):
        raise malformed("core:sha512", "a string")
    paths = (data_path.with_name(dataset), metadata_path)
    return _opened(paths[0], lambda file: _sample_stream(file, paths, "SigMF", sample_type, sha512))


def _sample_stream(
    file: BinaryIO, paths: Sequence[Path], format: str, sample_type: str, sha512: str | None = None
) -> Stream:
    kind, order = sample_type.split("_")
    stored = np.dtype(("<" if order == "le" else ">") + {"cf32": "f4", "cf64": "f8", "ci16": "i2"}[kind])
    dtype = np.dtype(np.complex128 if kind == "cf64" else np.complex64)
    return _BinaryStream(file, paths, f"{format} {sample_type}", stored, dtype, sha512=sha512)


def _opened(path: Path | None, use: Callable[[BinaryIO], _T]) -> _T:
    """Open the file, or standard input for None, and hand it to ``use``, which owns it unless it raises."""
    with _reading(str(path or "standard input")):
        file = open(0, "rb", closefd=False) if path is None else open(path, "rb")
    try:
        return use(file)
    except BaseException:
        file.close()
        raise


def _require_file(path: Path, expected: str) -> None:
    """Where a name tells no format: a missing file or a directory is not to pass for one of unknown kind."""
    try:
        problem = os.strerror(errno.EISDIR) if stat.S_ISDIR(os.stat(path).st_mode) else None
    except OSError as refused:
        problem = refused.strerror
    if problem is not None:
        raise RecordingError(f"{path}: cannot be read: {problem}; expected {expected}")


@contextmanager
def _reading(name: str) -> Iterator[None]:
    try:
        yield
    except OSError as problem:
        raise RecordingError(f"{name}: cannot be read: {problem.strerror}") from problem
    except UnicodeDecodeError as problem:
        raise RecordingError(f"{name}: is not UTF-8 text") from problem


def _bytes_left(file: BinaryIO) -> int | None:
    status = os.fstat(file.fileno())
    return status.st_size - file.tell() if stat.S_ISREG(status.st_mode) else None


def _rows(file: BinaryIO, name: str, parse: Callable[[Sequence[str]], _T]) -> Iterator[_T]:
    """Parse a text file line by line; a first line without any number holds headings."""
    headings_may_follow = True
    for number in count(1):
        with _reading(name):
            line = file.readline(_LONGEST_LINE)
            text = line.decode("utf-8-sig" if number == 1 else "utf-8").strip()
        if not line:
            return
        if len(line) == _LONGEST_LINE:
            raise RecordingError(f"{name}, line {number}: {_LONGEST_LINE} bytes or more; expected numbers")
        if not text or text.startswith("#"):
            continue
        fields = text.split(",")
        is_headings = headings_may_follow and not any(map(_is_number, fields))
        headings_may_follow = False
        if is_headings:
            continue
        try:
            row = parse(fields)
        except ValueError as problem:
            raise RecordingError(f"{name}, line {number}: {text!r}: {problem}") from None
        yield row


def _complex(text: str) -> complex:
    """Read a complex number; i serves for j, as other tools write it."""
    return complex(text.strip().removesuffix("i") + "j" if text.strip().endswith("i") else text)


def _is_number(text: str) -> bool:
    try:
        _complex(text)
    except ValueError:
        return False
    return True


def _complex_row() -> Callable[[Sequence[str]], complex]:
    columns = 0

    def parse(fields: Sequence[str]) -> complex:
        nonlocal columns
        columns = columns or len(fields)
        try:
            if len(fields) != columns:  # a line cut to its first column must not pass for a real sample
                raise ValueError
            if columns == 1:
                return _complex(fields[0])
            re, im = map(float, fields)
        except ValueError:
            expected = "one complex number" if columns == 1 else "two numbers re,im"
            raise ValueError(f"expected {expected}") from None
        return complex(re, im)

    return parse


def _real_row(fields: Sequence[str]) -> float:
    try:
        (value,) = fields
        return float(value)
    except ValueError:
        raise ValueError("expected one number") from None


def _labelled_row(fields: Sequence[str]) -> tuple[complex, int]:
    try:
        re, im, label = fields
        return complex(float(re), float(im)), int(label.strip(), 0)
    except ValueError:
        raise ValueError("expected re,im,label, the label an integer such as 11 or 0b1011") from None


def _require_equal_lengths(
    stream: Stream, length: int, samples: Stream, symbols: int, about: str = ""
) -> None:
    if length != symbols:
        raise RecordingError(
            f"{stream.name}: {about}{length} numbers; expected one for each of the {symbols} symbols "
            f"of {samples.name}"
        )


def _companion_block(stream: Stream, samples: Stream, length: int, done: int) -> NDArray[Any]:
    block = stream.read(length)
    if len(block) < length:
        _require_equal_lengths(stream, done + len(block), samples, samples.length or done + length)
    return block


def _require_noise_variance(stream: Stream, n0: NDArray[Any], done: int) -> None:
    wrong = ~(np.isfinite(n0) & (n0 > 0))
    if wrong.any():
        index = int(wrong.argmax())
        raise RecordingError(
            f"{stream.name}: noise variance {n0[index]} at index {done + index}; expected finite and > 0"
        )


def _same_file(path: Path, other: Path) -> bool:
    return os.path.exists(path) and os.path.exists(other) and path.samefile(other)


def _npy_header(dtype: np.dtype[Any], shape: tuple[int, int]) -> bytes:
    """Header of the .npy format, version 1.0, as NumPy documents it.

    128 bytes for every shape, so that the end of a stream can put the true one in place of the first.
    """
    entries = repr({"descr": dtype.str, "fortran_order": False, "shape": shape})
    return b"\x93NUMPY\x01\x00" + (118).to_bytes(2, "little") + entries.ljust(117).encode() + b"\n"


def _llr_conventions(demapper: SoftDemapper) -> dict[str, dict[str, Any]]:
    one = demapper.positive_bit
    llr = {
        "definition": f"L_k = ln P(b_k = {one} given y) - ln P(b_k = {1 - one} given y), natural logarithm",
        "positive_means_bit": one,
        "bit_order": "column k is b_k; b_0 is the first bit on the line, the label's most significant",
        "rule": demapper.rule,
        "prior": "none: all labels equally likely",
    }
    word = demapper.output
    if not isinstance(word, Word):
        return {
            "llr": llr,
            "output": {
                "type": demapper.dtype.name,
                "saturation": "at the largest finite value",
                "symbol_not_finite": "NaN for its bits",
            },
        }
    return {
        "llr": llr,
        "output": {
            "type": demapper.dtype.name,
            "bits": word.bits,
            "step": word.step,
            "value": "LLR = step x integer",
            "rounding": "to nearest, halves to even",
            "saturation": f"symmetric, at {-word.limit} and {word.limit}",
            "symbol_not_finite": "0 for its bits, an erasure",
        },
    }


def _json_by_lines(statement: Mapping[str, object]) -> bytes:
    """Serialise with one line a field: a constellation spread over a line a number would bury the rest."""
    lines = (f"  {json.dumps(key)}: {json.dumps(value, allow_nan=False)}" for key, value in statement.items())
    return ("{\n" + ",\n".join(lines) + "\n}\n").encode()
