"""Time the demapper against copying its output and against brute force.

    python bench/speed.py [--levels v4 v3] [--large] [--json FILE] [--picture FILE]

Each case is first checked against the definition (pydemap.reference), then
timed: the least of many runs, alternating with its baselines in one process.
See README.md in this folder for how to read the table.
"""

from __future__ import annotations

import argparse
import json
import platform
import subprocess
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

import pydemap

try:
    import numba
except ModuleNotFoundError:
    numba = None

CACHED_BYTES, LARGE_BYTES = 2**20, 2**29  # of output
BRUTE_FORCE_SYMBOLS = 256


@dataclass(frozen=True)
class Case:
    name: str
    constellation: Callable[[], pydemap.Constellation]
    rule: str = "max-log"
    output: Any = "float32"
    each: bool = False  # gain and N0 given for each symbol
    prior: bool = False
    threads: int = 1


@dataclass
class Row:
    level: str
    case: str
    order: int
    family: str
    rule: str
    output: str
    extras: str
    ns_per_llr: float
    msymbol_per_s: float
    to_memcpy: float
    to_memcpy_large: float | None = None
    numpy_over: float | None = None
    numba_over: float | None = None
    baseline_ns: dict[str, float] = field(default_factory=dict)


def random_points(order: int) -> pydemap.Constellation:
    rng = np.random.default_rng(order)
    return pydemap.Constellation(
        rng.standard_normal(order) + 1j * rng.standard_normal(order), rng.permutation(order)
    )


def cases() -> list[Case]:
    square = {m: (lambda m=m: pydemap.square_qam(m)) for m in (4, 16, 64, 256, 1024, 4096, 65536)}
    cross = {m: (lambda m=m: pydemap.cross_qam(m)) for m in (32, 128, 2048)}
    itu = lambda: pydemap.published_mapping("ITU-T G.9701", 128)  # noqa: E731
    word = pydemap.Word(6, 0.5)
    return [
        *(Case(f"square {m}", c) for m, c in square.items()),
        *(Case(f"square {m}", c, "exact") for m, c in square.items()),
        *(Case(f"cross {m}", c, rule) for m, c in cross.items() for rule in ("max-log", "exact")),
        *(Case("ITU-T 128", itu, rule) for rule in ("max-log", "exact")),
        *(Case("random 256", lambda: random_points(256), rule) for rule in ("max-log", "exact")),
        *(Case("square 64", square[64], r, o) for r in ("max-log", "exact") for o in ("float64", word)),
        *(Case("square 64", square[64], rule, each=True) for rule in ("max-log", "exact")),
        *(Case("square 64", square[64], rule, prior=True) for rule in ("max-log", "exact")),
        Case("square 256", square[256], "exact", threads=2),
    ]  # fmt: skip


def best(runs: int, *functions: Callable[[], object]) -> list[float]:
    """Least time of each function in seconds, the functions taking turns."""
    least = [float("inf")] * len(functions)
    for _ in range(runs):
        for i, function in enumerate(functions):
            start = time.perf_counter()
            function()
            least[i] = min(least[i], time.perf_counter() - start)
    return least


def brute_force(y: Any, n0: float, points: Any, ones: Any, exact: bool) -> Any:
    """The formula as one would write it in NumPy."""
    metric = -(np.abs(y[:, None] - points) ** 2) / n0
    llr = np.empty((len(y), ones.shape[1]))
    for k in range(ones.shape[1]):
        sides = []
        for side in (metric[:, ~ones[:, k]], metric[:, ones[:, k]]):
            top = side.max(axis=1)
            sides.append(top + np.log(np.exp(side - top[:, None]).sum(axis=1)) if exact else top)
        llr[:, k] = sides[0] - sides[1]
    return llr


def compiled_loop() -> Callable[..., Any] | None:
    if numba is None:
        return None

    @numba.njit(cache=False)
    def loop(y, n0, points, ones, exact, llr):  # type: ignore[no-untyped-def]
        m, n = ones.shape
        metric = np.empty(m)
        for i in range(len(y)):
            for j in range(m):
                d = y[i] - points[j]
                metric[j] = -(d.real * d.real + d.imag * d.imag) / n0
            for k in range(n):
                top0 = top1 = -np.inf
                for j in range(m):
                    if ones[j, k]:
                        top1 = max(top1, metric[j])
                    else:
                        top0 = max(top0, metric[j])
                if exact:
                    sum0 = sum1 = 0.0
                    for j in range(m):
                        if ones[j, k]:
                            sum1 += np.exp(metric[j] - top1)
                        else:
                            sum0 += np.exp(metric[j] - top0)
                    llr[i, k] = top0 - top1 + np.log(sum0 / sum1)
                else:
                    llr[i, k] = top0 - top1

    return loop


def working_n0(c: pydemap.Constellation) -> float:
    """N0 at which about one bit in a hundred comes out wrong: half-spacing 2.1 standard deviations."""
    return float(2 * (c.min_distance / 2 / 2.1) ** 2)


def make_input(
    case: Case, c: pydemap.Constellation, count: int, real: Any
) -> tuple[Any, Any, dict[str, Any]]:
    rng = np.random.default_rng(1)
    n0: Any = working_n0(c)
    complex_type = np.complex128 if real == np.float64 else np.complex64
    noise = np.sqrt(n0 / 2) * (rng.standard_normal(count) + 1j * rng.standard_normal(count))
    sent = c.points[rng.integers(0, c.order, count)]
    options: dict[str, Any] = {"threads": case.threads} if case.threads > 1 else {}
    if case.each:
        h = np.exp(2j * np.pi * rng.random(count)) * (0.5 + rng.random(count))
        options["gain"] = h.astype(complex_type)
        sent, n0 = sent * h, np.full(count, n0, real)
    if case.prior:
        options["prior"] = rng.standard_normal((count, c.bits_per_symbol)).astype(real)
    return (sent + noise).astype(complex_type), n0, options


def check(case: Case, demap: pydemap.SoftDemapper, y: Any, n0: Any, options: dict[str, Any]) -> None:
    """A wrong result is not worth timing."""
    few = slice(0, 64)
    cut = {k: v[few] for k, v in options.items() if k != "threads"}
    noise = n0[few] if case.each else n0
    got = demap(y[few], noise, **cut)
    wanted = pydemap.reference.llr(y[few], noise, demap.constellation, rule=case.rule, **cut)
    if isinstance(demap.output, pydemap.Word):
        word = demap.output
        wanted = np.clip(wanted, -word.limit * word.step, word.limit * word.step)
        assert np.abs(got * word.step - wanted).max() <= 0.51 * word.step, case
    else:
        assert np.allclose(got, wanted, rtol=1e-4, atol=1e-4), case


def measure(case: Case, level: str, runs: int, large: bool, loop: Callable[..., Any] | None) -> Row:
    c = case.constellation()
    demap = pydemap.SoftDemapper(c, rule=case.rule, output=case.output)  # type: ignore[arg-type]
    n = c.bits_per_symbol
    real = np.float64 if case.output == "float64" else np.float32

    def timed(nbytes: int, runs: int) -> tuple[float, float, int]:
        count = nbytes // (n * demap.dtype.itemsize)
        y, n0, options = make_input(case, c, count, real)
        check(case, demap, y, n0, options)
        out = np.zeros((count, n), demap.dtype)
        copy = np.zeros_like(out)
        ours, memcpy = best(runs, lambda: demap(y, n0, out=out, **options), lambda: np.copyto(copy, out))
        return ours, memcpy, count

    # threads only pay off on arrays that last longer than starting them
    ours, memcpy, count = timed(CACHED_BYTES * (32 if case.threads > 1 else 1), runs)
    extras = [name for name in ("each", "prior") if getattr(case, name)]
    extras += [f"{case.threads} threads"] if case.threads > 1 else []
    row = Row(
        level, case.name, c.order, demap.family, case.rule, str(case.output), ", ".join(extras),
        ours / (count * n) * 1e9, count / ours / 1e6, ours / memcpy,
    )  # fmt: skip
    if large and c.order <= 4096 and case.rule == "max-log":
        ours, memcpy, _ = timed(LARGE_BYTES, 3)
        row.to_memcpy_large = ours / memcpy
    if not extras and c.order <= 4096 and case.output == "float32":
        y, n0, _ = make_input(case, c, BRUTE_FORCE_SYMBOLS, np.float64)
        ones, exact = c.bits.astype(bool), case.rule == "exact"
        baselines = {"numpy": lambda: brute_force(y, n0, c.points, ones, exact)}
        if loop is not None:
            result = np.empty((len(y), n))
            baselines["numba"] = lambda: loop(y, n0, c.points, ones, exact, result)
            baselines["numba"]()  # compiles
            assert np.allclose(result, baselines["numpy"]()), case
        for name, seconds in zip(baselines, best(3, *baselines.values()), strict=True):
            row.baseline_ns[name] = seconds / (len(y) * n) * 1e9
        row.numpy_over = row.baseline_ns["numpy"] / row.ns_per_llr
        if loop is not None:
            row.numba_over = row.baseline_ns["numba"] / row.ns_per_llr
    return row


def small_call(runs: int) -> float:
    """Microseconds of one call with one symbol, everything given."""
    demap = pydemap.SoftDemapper(pydemap.square_qam(64), rule="max-log")
    y, h = np.array([0.3 + 0.1j], np.complex64), np.array([1j], np.complex64)
    n0, prior, out = np.array([0.1], np.float32), np.zeros((1, 6), np.float32), np.empty((1, 6), np.float32)
    loops = 2000

    def calls() -> None:
        for _ in range(loops):
            demap(y, n0, gain=h, prior=prior, out=out)

    return best(runs, calls)[0] / loops * 1e6


def machine() -> dict[str, str]:
    cpu = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        named = [
            line.split(":", 1)[1].strip() for line in info.read_text().splitlines() if "model name" in line
        ]
        cpu = named[0] if named else cpu
    compiler = subprocess.run(["cc", "--version"], capture_output=True, text=True).stdout.splitlines()
    return {
        "cpu": cpu,
        "system": f"{platform.system()} {platform.machine()}",
        "python": platform.python_version(),
        "numpy": np.__version__,
        "numba": numba.__version__ if numba is not None else "not installed",
        "compiler at hand": compiler[0] if compiler else "none",
        "pydemap": pydemap.__version__,
    }


def show(rows: list[Row], about: dict[str, str], call_us: float) -> str:
    def cell(value: float | None, form: str) -> str:
        return "" if value is None else format(value, form)

    lines = [", ".join(f"{k}: {v}" for k, v in about.items()), ""]
    columns = ["level", "case", "family", "rule", "output", "ns an LLR", "Msymbol/s"]
    columns += ["x memcpy", "x memcpy, large", "NumPy / ours", "numba / ours"]
    lines.append(f"| {' | '.join(columns)} |")
    lines.append("|" + " --- |" * len(columns))
    for r in rows:
        case = f"{r.case}, {r.extras}" if r.extras else r.case
        cells = [r.level, case, r.family, r.rule, r.output, f"{r.ns_per_llr:.3f}", f"{r.msymbol_per_s:.1f}"]
        cells += [f"{r.to_memcpy:.1f}", cell(r.to_memcpy_large, ".2f")]
        cells += [cell(r.numpy_over, ".0f"), cell(r.numba_over, ".0f")]
        lines.append(f"| {' | '.join(cells)} |")
    lines += ["", f"One call with one symbol, gain, prior and out given: {call_us:.2f} us."]
    return "\n".join(lines)


def picture(rows: list[Row], path: str) -> None:
    from matplotlib.figure import Figure

    figure = Figure(figsize=(7, 4.5), layout="constrained")
    axes = figure.add_subplot()
    styles = {"max-log": ("o", "-"), "exact": ("s", "--")}
    for level in dict.fromkeys(r.level for r in rows):
        for rule, (marker, line) in styles.items():
            for kind in ("square", "cross"):
                wanted = (level, rule, "float32", "")
                chosen = [r for r in rows if (r.level, r.rule, r.output, r.extras) == wanted]
                chosen = [r for r in chosen if r.case.startswith(kind)]
                axes.plot(
                    [r.order for r in chosen], [r.ns_per_llr for r in chosen], marker=marker, linestyle=line,
                    fillstyle="full" if kind == "square" else "none", label=f"{kind}, {rule}, {level}",
                )  # fmt: skip
    axes.set(xscale="log", yscale="log", xlabel="order M", ylabel="time an LLR in ns (float32, in cache)")
    axes.set_xscale("log", base=2)
    axes.grid(True, which="both", alpha=0.3)
    axes.legend(fontsize=8)
    figure.savefig(path)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--levels", nargs="+", default=[pydemap.isa()], help="instruction-set levels to time")
    parser.add_argument("--runs", type=int, default=30, help="runs of which the least counts")
    parser.add_argument("--large", action="store_true", help="also time 512 MiB of output, out of any cache")
    parser.add_argument("--json", help="write the rows to this file too")
    parser.add_argument("--picture", help="draw ns an LLR against order into this file (PNG or SVG)")
    options = parser.parse_args()
    loop, rows = compiled_loop(), []
    for level in options.levels:
        pydemap.use_isa(level)
        rows += [measure(case, level, options.runs, options.large, loop) for case in cases()]
    pydemap.use_isa("auto")
    about, call_us = machine(), small_call(options.runs)
    print(show(rows, about, call_us))
    if options.json:
        document = {"machine": about, "one_symbol_call_us": call_us, "rows": [asdict(r) for r in rows]}
        Path(options.json).write_text(json.dumps(document, indent=1) + "\n")
    if options.picture:
        picture(rows, options.picture)


if __name__ == "__main__":
    main()
