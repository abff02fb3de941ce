"""The commands: parse, call, print.

click and rich come with the extra ``cli``. They are imported inside the functions, so that a plain install
can import this module and say what is missing.
"""

from __future__ import annotations

import math
import shlex
import signal
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

import pydemap
from pydemap import demo as scenario
from pydemap import plot, recording
from pydemap.constellation import Constellation, cross_qam, square_qam
from pydemap.demapper import SoftDemapper, Word
from pydemap.mapping import available_mappings, published_mapping

if TYPE_CHECKING:
    import click


def main(arguments: Sequence[str] | None = None) -> int:
    """Run ``pydemap`` and return its exit status: 0 done, 1 failed, 2 wrongly called, 130 interrupted."""
    try:
        import click
        import rich  # noqa: F401
    except ModuleNotFoundError as missing:
        return _not_installed(missing)
    try:
        with _termination_as_exit():
            status = _commands().main(arguments, prog_name="pydemap", standalone_mode=False)
    except click.ClickException as problem:
        problem.show()
        return problem.exit_code
    except (click.Abort, KeyboardInterrupt):
        click.echo("pydemap: interrupted; no unfinished file is left", err=True)
        return 130
    except ModuleNotFoundError as missing:
        return _not_installed(missing)
    except (ValueError, OSError, MemoryError) as problem:
        click.echo(f"pydemap: {problem or type(problem).__name__}", err=True)
        return 1
    return status if isinstance(status, int) else 0


def demo(directory: str | None = None, seed: int = 1) -> None:
    """Make a small recorded burst and take it through the main job.

    A weather station sends 300000 symbols of 128-QAM over a fading microwave hop: the samples come as a SigMF
    recording, gains and sent bits as .npy files. The command llr makes LLRs of them, which are then held
    against the bits.
    """
    import click

    place = Path(directory or tempfile.mkdtemp(prefix="pydemap-demo-"))
    try:
        place.mkdir(exist_ok=True)
    except OSError as problem:
        raise recording.RecordingError(f"{place}: expected a directory: {problem.strerror}") from problem
    burst = scenario.record_burst(place, seed)
    target = place / "burst-llr.npy"
    order, n0 = scenario.ORDER, burst.noise_variance
    typed = ["llr", burst.recording, target, "--order", order, "--n0", n0, "--gain-file", burst.gain]
    click.echo(f"The burst lies in {place}. Now the main job, as if you had typed")
    click.echo(f"  pydemap {shlex.join(map(str, typed))}")
    start = time.perf_counter()
    llr(str(burst.recording), str(target), order=order, n0=n0, gain_file=str(burst.gain))
    seconds = time.perf_counter() - start
    result = scenario.score(np.load(burst.bits), np.load(target))
    rate = scenario.SYMBOLS / seconds / 1e6
    _print_facts(
        {
            "symbols": f"{scenario.SYMBOLS}",
            "LLRs": f"{result.llrs}",
            "hard-decision errors": f"{result.errors} bits, {result.errors / result.llrs:.2e} of all",
            "information carried": f"{result.information:.4f} of {result.bits_per_symbol} bits a symbol",
            "time, file to file": f"{seconds:.3f} s, {rate:.1f} million symbols a second",
        }
    )


def llr(
    source: str,
    target: str,
    *,
    order: int | None = None,
    mapping: str | None = None,
    points: str | None = None,
    n0: float | None = None,
    es_n0_db: float | None = None,
    n0_file: str | None = None,
    estimate_n0: bool = False,
    gain_file: str | None = None,
    rule: Any = "exact",
    output: Any = "float32",
    positive_bit: int = 0,
    threads: int = 1,
    input_type: str | None = None,
) -> None:
    """Turn a file of received symbols IN into a file of LLRs OUT.

    IN is a SigMF recording (either file or their common stem), .npy, .csv (re,im or one complex number a
    line), or a raw interleaved file; - is raw standard input. OUT in .npy has the shape (symbols, bits); any
    other name gets the same numbers raw, little-endian. OUT.json beside it states every convention. Both
    appear complete or not at all.

    One symbol is y = h s + w: N0 is E|w|^2 over both dimensions, h the gain, 1 unless a file tells.
    """
    import click

    constellation, name = _constellation(order, mapping, points)
    if [n0, es_n0_db, n0_file].count(None) + (not estimate_n0) != 3:
        raise click.UsageError("expected exactly one of --n0, --es-n0-db, --n0-file and --estimate-n0")
    with _refusal_as_usage_error():
        demapper = SoftDemapper(constellation, rule=rule, output=output, positive_bit=positive_bit)
    with ExitStack() as files:
        samples = files.enter_context(recording.open_samples(source, input_type))
        gain = files.enter_context(recording.open_gain(gain_file)) if gain_file else None
        noise: float | recording.Stream
        if n0_file:
            origin = "a file, one a symbol"
            noise = files.enter_context(recording.open_noise_variance(n0_file))
        elif es_n0_db is not None:
            origin = f"Es/N0 of {es_n0_db} dB"
            noise = constellation.mean_energy / 10 ** (es_n0_db / 10)
        elif n0 is not None:
            origin = "given"
            noise = n0
        else:
            noise, origin = recording.estimate_from_start(samples, constellation, gain=gain)
            click.echo(f"estimated N0 = {noise!r}")
        statement = recording.demap_recording(
            demapper,
            samples,
            target,
            noise_variance=noise,
            noise_origin=origin,
            constellation_name=name,
            gain=gain,
            threads=threads,
            progress=files.enter_context(_progress_bar(samples.length)),
        )
    symbols, bits = statement["data"]["shape"]
    click.echo(f"{symbols} symbols, {symbols * bits} LLRs in {target}, explained by {target}.json")


def show(
    order: int | None = None,
    mapping: str | None = None,
    points: str | None = None,
    picture: str | None = None,
    bit: int | None = None,
) -> None:
    """Print the facts of a constellation, and draw it.

    The picture shows points, labels (first bit first) and decision regions. Shaded are the labels with an
    odd number of ones, which makes a chessboard where neighbours differ in one bit, or those whose --bit
    is 1.
    """
    import click

    constellation, name = _constellation(order, mapping, points)
    if bit is not None and not picture:
        raise click.UsageError("--bit chooses what --picture shades; expected --picture too")
    if picture:
        with _refusal_as_usage_error():
            plot.save(constellation, picture, bit=bit, name=name)
    demapper = SoftDemapper(constellation)
    _print_facts(
        {
            "constellation": name,
            "order M": f"{constellation.order}",
            "bits a symbol n": f"{constellation.bits_per_symbol}",
            "mean energy Es": f"{constellation.mean_energy:.9g}",
            "minimum distance": f"{constellation.min_distance:.9g}",
            "half-spacing a": f"{constellation.min_distance / 2:.9g}",
            "peak to mean energy": f"{constellation.peak_to_mean:.9g}, "
            f"{10 * math.log10(constellation.peak_to_mean):.4f} dB",
            "neighbours at minimum distance": f"{constellation.mean_neighbours:.9g} on average",
            "Gray penalty": f"{constellation.gray_penalty:.9g} bits from neighbour to neighbour",
            "kernel family": demapper.family,
            "boxes": f"{demapper.boxes}" if demapper.boxes else "none",
            **({"picture": picture} if picture else {}),
        }
    )


def _commands() -> click.Group:
    """The commands with their options; every function above is one."""
    import click

    option = click.Option
    documents = ", ".join(dict.fromkeys(f'"{document}"' for document, _ in available_mappings()))
    constellation = [
        option(
            ["--order"], type=int, metavar="M", help="Points: square QAM, or cross QAM for 8, 32, 128 ..."
        ),
        option(
            ["--mapping"], metavar="DOCUMENT", help=f"A standard's constellation of that order: {documents}."
        ),
        option(
            ["--points"], metavar="FILE", help="Your own: .csv lines re,im,label or .npz (points, labels)."
        ),
    ]
    noise = [
        option(["--n0"], type=float, callback=_positive, metavar="N0", help="Noise variance of all symbols."),
        option(
            ["--es-n0-db"],
            type=float,
            callback=_decibels,
            metavar="DB",
            help="Or Es/N0, Es the points' mean energy.",
        ),
        option(["--n0-file"], metavar="FILE", help="Or one a symbol: .npy, .csv, raw .f32 or .f64."),
        option(
            ["--estimate-n0"],
            is_flag=True,
            help=f"Or a blind estimate from the first {recording.BLOCK_SYMBOLS} symbols, "
            "of which max(1024, 2^22 / M) are evenly picked, or all of fewer.",
        ),
    ]
    numbers = [
        option(
            ["--gain-file"],
            metavar="FILE",
            help="Gain of each symbol: as IN, raw as .cf32_le and so on; or real: .npy, "
            ".csv (one number a line), raw .f32 or .f64.",
        ),
        option(
            ["--rule"], type=click.Choice(["exact", "max-log", "linear"]), default="exact", show_default=True
        ),
        option(
            ["--output"],
            callback=_output,
            default="float32",
            show_default=True,
            metavar="TYPE",
            help="float32, float64, or words of BITS:STEP such as 6:0.5.",
        ),
        option(
            ["--positive-bit"],
            type=click.IntRange(0, 1),
            metavar="BIT",
            default=0,
            show_default=True,
            help="What a positive LLR stands for.",
        ),
        option(["--threads"], type=click.IntRange(1), metavar="N", default=1, show_default=True),
        option(["--input-type"], type=click.Choice(recording.SAMPLE_TYPES), help="Type of a raw IN."),
    ]
    files = [click.Argument(["source"], metavar="IN"), click.Argument(["target"], metavar="OUT")]
    picture = [
        option(["--picture"], metavar="FILE", help="Draw it into FILE, .png or .svg."),
        option(["--bit"], type=int, metavar="K", help="Shade where bit K is 1; the first is 0."),
    ]
    burst = [
        option(["--directory"], metavar="DIR", help="Where its files go; else a new temporary directory."),
        option(["--seed"], type=click.IntRange(0), metavar="N", default=1, show_default=True),
    ]
    group = click.Group("pydemap", help="QAM soft demapping: received symbols to bit log-likelihood ratios.")
    click.version_option(pydemap.__version__)(group)
    commands: list[tuple[Callable[..., None], list[click.Parameter]]] = [
        (demo, [*burst]),
        (llr, [*files, *constellation, *noise, *numbers]),
        (show, [*constellation, *picture]),
    ]
    for function, parameters in commands:
        group.add_command(
            click.Command(function.__name__, callback=function, help=function.__doc__, params=parameters)
        )
    return group


def _constellation(order: int | None, mapping: str | None, points: str | None) -> tuple[Constellation, str]:
    """The constellation that the options ask for, and what to call it."""
    import click

    with _refusal_as_usage_error():
        if points is not None and order is None and mapping is None:
            return recording.read_constellation(points), f"points of {points}"
        if points is not None or order is None:
            raise click.UsageError("expected --order, alone or with --mapping, or --points alone")
        if mapping is not None:
            return published_mapping(mapping, order), f"{mapping}, {order} points"
        if order.bit_length() % 2:
            return square_qam(order), f"square QAM, {order} points"
        return cross_qam(order), f"cross QAM, {order} points"


def _positive(context: click.Context, parameter: click.Parameter, value: float | None) -> float | None:
    import click

    if value is not None and not 0 < value < math.inf:
        raise click.BadParameter(f"{value}: expected finite and greater than 0")
    return value


def _decibels(context: click.Context, parameter: click.Parameter, value: float | None) -> float | None:
    import click

    if value is not None and not -300 <= value <= 300:
        raise click.BadParameter(f"{value}: expected -300 to 300 dB")
    return value


def _output(context: click.Context, parameter: click.Parameter, value: str) -> str | Word:
    import click

    if value in ("float32", "float64"):
        return value
    bits, _, step = value.partition(":")
    try:
        word = int(bits), float(step)
    except ValueError:
        expected = "float32, float64 or words of BITS:STEP such as 6:0.5"
        raise click.BadParameter(f"{value!r}: expected {expected}") from None
    try:
        return Word(*word)
    except ValueError as problem:
        raise click.BadParameter(f"{value!r}: {problem}") from problem


def _print_facts(facts: dict[str, str]) -> None:
    import click

    width = max(map(len, facts))
    for name, value in facts.items():
        click.echo(f"{name:<{width}}  {value}")


@contextmanager
def _progress_bar(total: int | None) -> Iterator[Callable[[int], object] | None]:
    """A bar on standard error that a function moves on; none where that is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("symbols"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("", total=total)
        yield lambda symbols: bar.advance(task, symbols)


@contextmanager
def _refusal_as_usage_error() -> Iterator[None]:
    """What the library refuses was asked for on the command line; a file's own fault is not."""
    import click

    try:
        yield
    except recording.RecordingError:
        raise
    except ValueError as problem:
        raise click.UsageError(str(problem)) from problem


@contextmanager
def _termination_as_exit() -> Iterator[None]:
    """Let SIGTERM and SIGHUP, like Ctrl-C, unwind the stack, which removes unfinished files."""

    def leave(number: int, _: object) -> None:
        raise SystemExit(128 + number)

    changed = []
    if threading.current_thread() is threading.main_thread():
        numbers = [getattr(signal, name) for name in ("SIGTERM", "SIGHUP") if hasattr(signal, name)]
        changed = [number for number in numbers if signal.getsignal(number) == signal.SIG_DFL]
    for number in changed:
        signal.signal(number, leave)
    try:
        yield
    finally:
        for number in changed:
            signal.signal(number, signal.SIG_DFL)


def _not_installed(missing: ModuleNotFoundError) -> int:
    print(f"pydemap: {missing.name} is not installed: pip install 'pydemap[cli]'", file=sys.stderr)
    return 2


if __name__ == "__main__":
    sys.exit(main())
