"""Where vector code and careless callers go wrong: lengths, alignment, neighbours, bad input, extremes."""

import os
import subprocess
import sys

import numpy as np
import pytest

import pydemap
from pydemap import SoftDemapper, Word

LARGEST = {"float32": np.finfo(np.float32).max, "float64": np.finfo(np.float64).max}


def ring_points():
    points = np.concatenate(
        [np.exp(2j * np.pi * np.arange(4) / 4), 1.7 * np.exp(2j * np.pi * np.arange(12) / 12)]
    )
    return pydemap.Constellation(points, np.random.default_rng(0).permutation(16))


FAMILIES = {"fold": pydemap.square_qam(64), "boxes": pydemap.cross_qam(32), "points": ring_points()}
OUTPUTS = ["float32", "float64", Word(6, 0.5), Word(12, 0.03)]
# Every kernel: (family, rule, output).
KERNELS = [
    (family, rule, output)
    for family in FAMILIES
    for rule in ("exact", "max-log", "linear")
    for output in OUTPUTS
    if rule != "linear" or family == "fold"
]
kernels = pytest.mark.parametrize("family, rule, output", KERNELS, ids=str)


def inputs(family, output, count, seed=0, scalar_n0=False):
    """y, N0 and the keyword arguments gain and prior, all of the kernel's own types."""
    c = FAMILIES[family]
    rng = np.random.default_rng(seed)
    real = np.dtype("float64" if output == "float64" else "float32")
    cplx = np.result_type(real, np.complex64)
    n0 = 10 ** rng.uniform(-3, 1, () if scalar_n0 else count)
    noise = rng.standard_normal((2, 2, count))
    gain = noise[0, 0] + 1j * noise[0, 1]
    y = gain * rng.choice(c.points, count) + np.sqrt(n0 / 2) * (noise[1, 0] + 1j * noise[1, 1])
    prior = rng.normal(0, 3, (count, c.bits_per_symbol))
    return y.astype(cplx), n0.astype(real), {"gain": gain.astype(cplx), "prior": prior.astype(real)}


def unaligned(array, offset):
    """The same values at an address `offset` bytes past an aligned one."""
    memory = np.empty(array.nbytes + 64 + offset, np.uint8)
    start = -memory.ctypes.data % 64 + offset
    view = memory[start : start + array.nbytes].view(array.dtype).reshape(array.shape)
    view[...] = array
    return view


def guarded(shape, dtype, offset):
    """An output among guard bytes, `offset` bytes past an aligned address, and a check of the guard."""
    nbytes = int(np.prod(shape)) * np.dtype(dtype).itemsize
    memory = np.full(nbytes + 256 + 64, 0xA5, np.uint8)
    start = -memory.ctypes.data % 64 + 128 + offset
    out = memory[start : start + nbytes].view(dtype).reshape(shape)

    def check():
        assert (memory[:start] == 0xA5).all() and (memory[start + nbytes :] == 0xA5).all(), (
            "wrote outside out="
        )

    return out, check


# Vector edges.


@kernels
def test_every_length(isa, family, rule, output):
    """Lengths 0 to 130: each symbol's result is that of the whole, and nothing beyond the end is written."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    for scalar_n0 in (True, False):
        y, n0, more = inputs(family, output, 130, scalar_n0=scalar_n0)
        whole = demapper(y, n0)
        for length in range(131):
            out, check = guarded((length, demapper.constellation.bits_per_symbol), demapper.dtype, 0)
            demapper(y[:length], n0 if scalar_n0 else n0[:length], out=out)
            check()
            assert np.array_equal(out, whole[:length]), length


@kernels
def test_every_length_with_gain_and_prior(isa, family, rule, output):
    """As above with all arguments, at the lengths around the vectors' sizes and their multiples."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0, more = inputs(family, output, 130)
    whole = demapper(y, n0, **more)
    for length in (0, 1, 3, 4, 5, 7, 8, 9, 15, 16, 17, 31, 32, 33, 63, 64, 65, 127, 128, 129):
        out, check = guarded((length, demapper.constellation.bits_per_symbol), demapper.dtype, 0)
        demapper(y[:length], n0[:length], gain=more["gain"][:length], prior=more["prior"][:length], out=out)
        check()
        assert np.array_equal(out, whole[:length]), length


@kernels
def test_starts_off_alignment(isa, family, rule, output):
    """Arrays that begin anywhere a value may begin, and inputs that begin at odd bytes too."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0, more = inputs(family, output, 67)
    whole = demapper(y, n0, **more)
    for step in range(1, 16):
        offset = step * demapper.dtype.itemsize
        out, check = guarded(whole.shape, demapper.dtype, offset)
        moved = {name: unaligned(value, offset) for name, value in {"y": y, "n0": n0, **more}.items()}
        demapper(**moved, out=out)
        check()
        assert np.array_equal(out, whole), offset
    odd = {name: unaligned(value, 1) for name, value in {"y": y, "n0": n0, **more}.items()}
    assert np.array_equal(demapper(**odd), whole)


@kernels
def test_neighbours_do_not_matter(isa, family, rule, output):
    """A symbol among random others, in any lane, gives the bits it gives alone; so do neighbours that take
    another branch: high SNR, NaN, far away."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0, more = inputs(family, output, 16, seed=1)
    alone = np.concatenate(
        [
            demapper(y[i : i + 1], n0[i : i + 1], **{k: v[i : i + 1] for k, v in more.items()})
            for i in range(16)
        ]
    )
    rng = np.random.default_rng(2)
    for _ in range(20):
        others, other_n0, other = inputs(family, output, 97, seed=int(rng.integers(1 << 30)))
        others[rng.integers(0, 97, 8)] *= 1e6
        others[rng.integers(0, 97, 8)] = np.nan
        other_n0[rng.integers(0, 97, 16)] = 1e-12
        lanes = rng.choice(97, 16, replace=False)
        others[lanes], other_n0[lanes] = y, n0
        for name, value in more.items():
            other[name][lanes] = value
        assert np.array_equal(demapper(others, other_n0, **other)[lanes], alone)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("output", ["float32", "float64"])
def test_slice_at_every_length(isa, family, output):
    demapper = SoftDemapper(FAMILIES[family], output=output)
    y, _, more = inputs(family, output, 130)
    whole = demapper.slice(y, gain=more["gain"])
    for length in range(131):
        part = demapper.slice(y[:length], gain=more["gain"][:length])
        assert part.shape == (length,) and np.array_equal(part, whole[:length])


# Bad input: refused by name, and nothing is written.

C = FAMILIES["fold"]
Y = np.full(6, 0.3 - 0.2j, np.complex64)


def refused(error, match, *arguments, demapper=None, out=None, **more):
    """The call raises, its message matches, and out= keeps its bytes."""
    demapper = demapper or SoftDemapper(C)
    if out is None and isinstance(arguments[0], np.ndarray):
        out = np.full((*arguments[0].shape, 6), 123.0, np.float32)
    before = None if out is None else out.tobytes()
    with pytest.raises(error, match=match):
        demapper(*arguments, out=out, **more)
    assert out is None or out.tobytes() == before


@pytest.mark.parametrize("dtype", ["float32", "float64", "int16", "int64", "bool", "object", "<U4"])
def test_y_must_be_complex(dtype):
    refused(TypeError, f"y must be complex.*{dtype}", np.ones(6).astype(dtype), 0.1)


def test_slice_needs_complex_y():
    with pytest.raises(TypeError, match="y.*complex"):
        SoftDemapper(C).slice(np.ones(6))


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 0.0, -0.0, -1.0])
def test_n0_must_be_finite_and_positive(bad):
    refused(ValueError, "n0", Y, bad)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 0.0, -1.0])
@pytest.mark.parametrize("output", ["float32", "float64", Word(8, 1.0)])
@pytest.mark.parametrize("threads", [1, 2])
def test_the_first_bad_n0_is_named(bad, output, threads):
    n0 = np.full(6, 0.1)
    n0[[4, 5]] = bad
    demapper = SoftDemapper(C, output=output)
    out = np.full((6, 6), 99, demapper.dtype)
    refused(ValueError, r"n0.*\b4\b", Y, n0, demapper=demapper, out=out, threads=threads)


def test_the_first_bad_n0_of_a_table_is_named_by_both_indices():
    n0 = np.full((2, 3), 0.1)
    n0[1, 2] = np.nan
    refused(ValueError, r"n0.*\(?1, 2\)?", Y.reshape(2, 3), n0)


def test_an_n0_that_float32_cannot_hold_is_its_nearest_positive():
    """1e-60 is good, though no float32: words and float32 LLRs saturate as for any other tiny N0."""
    least = float(np.finfo(np.float32).smallest_subnormal)
    for demapper in (SoftDemapper(C), SoftDemapper(C, output=Word(8, 1.0))):
        assert np.array_equal(demapper(Y, 1e-60), demapper(Y, least))
        assert np.array_equal(demapper(Y, np.full(6, 1e-60)), demapper(Y, least))
        assert np.array_equal(demapper(Y, 1e60), demapper(Y, LARGEST["float32"]))


@pytest.mark.parametrize("bad", ["0.1", [0.1, "x"], None, 0.1 + 0j, np.full(6, 0.1j)], ids=str)
def test_n0_must_be_real_numbers(bad):
    refused(TypeError, "n0", Y, bad)


@pytest.mark.parametrize(
    "argument, value",
    [
        ("n0", np.full(5, 0.1)),
        ("n0", np.full((6, 1), 0.1)),
        ("gain", np.ones(4, complex)),
        ("gain", np.ones((2, 6), complex)),
        ("prior", np.zeros(6 + 1)),
        ("prior", np.zeros((5, 6))),
        ("prior", np.zeros((1, 6, 6))),
    ],
)
def test_shapes_must_broadcast(argument, value):
    arguments = {"n0": 0.1, argument: value}
    shape = ", ".join(map(str, value.shape))
    refused(ValueError, rf"{argument}.*{shape}", Y, arguments.pop("n0"), **arguments)


@pytest.mark.parametrize(
    "argument, value", [("gain", np.array(["a"] * 6)), ("prior", np.zeros((6, 6), complex))]
)
def test_gain_and_prior_must_be_numbers(argument, value):
    refused(TypeError, argument, Y, 0.1, **{argument: value})


@pytest.mark.parametrize("shape", [(6,), (6, 5), (7, 6), (1, 6, 6), (36,), (6, 6, 1)])
def test_out_must_have_the_shape(shape):
    refused(ValueError, r"out.*\(6, 6\)", Y, 0.1, out=np.full(shape, 9, np.float32))


@pytest.mark.parametrize("dtype", ["float64", "float16", "int8", "int32", "complex64", ">f4"])
def test_out_must_have_the_type(dtype):
    refused((TypeError, ValueError), "out.*float32", Y, 0.1, out=np.full((6, 6), 9, dtype))


@pytest.mark.parametrize(
    "output, dtype", [(Word(8, 1.0), "int16"), (Word(9, 1.0), "int8"), ("float64", "float32")]
)
def test_out_must_have_the_type_of_the_output(output, dtype):
    demapper = SoftDemapper(C, output=output)
    refused(
        (TypeError, ValueError),
        f"out.*{demapper.dtype}",
        Y,
        0.1,
        demapper=demapper,
        out=np.full((6, 6), 9, dtype),
    )


@pytest.mark.parametrize(
    "out",
    [
        np.full((6, 6), 9, np.float32, order="F"),
        np.full((6, 12), 9, np.float32)[:, ::2],
        np.full((12, 6), 9, np.float32)[::2],
        np.full((6, 6), 9, np.float32)[::-1],
    ],
    ids=["Fortran order", "every second column", "every second row", "reversed"],
)
def test_out_must_be_contiguous(out):
    refused(ValueError, "out.*contiguous", Y, 0.1, out=out)


def test_out_must_be_writable():
    out = np.full((6, 6), 9, np.float32)
    out.flags.writeable = False
    refused(ValueError, "out.*writ", Y, 0.1, out=out)


def test_out_must_be_aligned():
    refused(ValueError, "out.*align", Y, 0.1, out=unaligned(np.full((6, 6), 9, np.float32), 1))


def test_out_must_be_an_array():
    with pytest.raises(TypeError, match="out"):
        SoftDemapper(C)(Y, 0.1, out=[[0.0] * 6] * 6)


@pytest.mark.parametrize("argument", ["y", "n0", "gain", "prior"])
def test_out_must_not_overlap_an_input(argument):
    """Each input as a view into the memory of out=."""
    memory = np.full(64, 0.5, np.float32)
    out = memory[:36].reshape(6, 6)
    views = {
        "y": memory[30:42].view(np.complex64),
        "n0": memory[35:41],
        "gain": memory[12:24].view(np.complex64),
        "prior": memory[6:42].reshape(6, 6),
    }
    arguments = {"y": Y, "n0": 0.1, argument: views[argument]}
    refused(
        ValueError, f"out overlaps {argument}", arguments.pop("y"), arguments.pop("n0"), out=out, **arguments
    )


@pytest.mark.parametrize("output", ["float32", "float64"])
def test_out_may_be_the_prior(output):
    """In place, as an iterative receiver may want it: the same bits as out of place."""
    demapper = SoftDemapper(C, output=output)
    y, n0, more = inputs("fold", output, 100)
    expected = demapper(y, n0, **more)
    assert demapper(y, n0, **more, out=more["prior"]) is more["prior"]
    assert np.array_equal(more["prior"], expected)


@pytest.mark.parametrize("rule", ["maxlog", "EXACT", "", None, 1])
def test_unknown_rule(rule):
    with pytest.raises(ValueError, match="rule.*exact.*max-log.*linear"):
        SoftDemapper(C, rule=rule)


@pytest.mark.parametrize("family", ["boxes", "points"])
def test_linear_needs_a_gray_grid(family):
    with pytest.raises(ValueError, match="linear"):
        SoftDemapper(FAMILIES[family], rule="linear")


@pytest.mark.parametrize("output", ["float16", "int8", "", None, 8, np.float32])
def test_unknown_output(output):
    with pytest.raises((TypeError, ValueError), match="output.*float32.*float64.*Word"):
        SoftDemapper(C, output=output)


@pytest.mark.parametrize("positive_bit", [-1, 2, 0.5, None])
def test_positive_bit_is_0_or_1(positive_bit):
    with pytest.raises((TypeError, ValueError), match="positive_bit"):
        SoftDemapper(C, positive_bit=positive_bit)


def test_constellation_is_needed():
    with pytest.raises(TypeError, match="Constellation"):
        SoftDemapper(np.array([-1, 1]))


@pytest.mark.parametrize("threads", [0, -1, 1.5, "2", None])
def test_threads_is_a_positive_integer(threads):
    refused((TypeError, ValueError), "threads", Y, 0.1, threads=threads)


@pytest.mark.parametrize("bits", [1, 0, -3, 17, 6.5, "8", None])
def test_word_bits(bits):
    with pytest.raises((TypeError, ValueError), match="bits.*2.*16"):
        Word(bits, 1.0)


@pytest.mark.parametrize("step", [0.0, -1.0, np.nan, np.inf, "1", None, 1e-60, 1e60])
def test_word_step(step):
    """A step that float32 cannot hold is as bad as one that is not finite or not > 0."""
    with pytest.raises((TypeError, ValueError), match="step"):
        Word(8, step)


@pytest.mark.parametrize(
    "document, order", [("3GPP TS 38.212", 16), ("IEEE 802.11", 32), ("ITU-T G.9701", 3), ("", 4)]
)
def test_unknown_mapping(document, order):
    with pytest.raises(ValueError, match="3GPP TS 38.211|IEEE 802.11|ITU-T G.9701"):
        pydemap.published_mapping(document, order)


@pytest.mark.parametrize("name", ["v9", "", "Baseline", "avx2"])
def test_unknown_isa(name):
    """The error names the levels at hand, and the level in use stays."""
    before = pydemap.isa()
    with pytest.raises(ValueError, match="instruction-set level") as error:
        pydemap.use_isa(name)
    assert all(repr(level) in str(error.value) for level in [*pydemap.available_isas(), name])
    assert pydemap.isa() == before


def in_environment(isa, program):
    return subprocess.run(
        [sys.executable, "-c", program],
        env={**os.environ, "PYDEMAP_ISA": isa},
        capture_output=True,
        text=True,
    )


def test_unknown_isa_in_the_environment():
    run = in_environment("v9", "import pydemap; pydemap.isa()")
    assert run.returncode != 0
    last = run.stderr.strip().splitlines()[-1]
    assert "PYDEMAP_ISA" in last and "v9" in last and all(name in last for name in pydemap.available_isas())


@pytest.mark.parametrize("name", pydemap.available_isas())
def test_isa_from_the_environment(name):
    assert in_environment(name, "import pydemap; print(pydemap.isa())").stdout.strip() == name


# Values without a meaning, and values at the ends of the range.


@kernels
@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_non_finite_y_or_gain_erases_its_symbol(family, rule, output, bad):
    """NaN in all bits of that symbol, 0 in words, in either part; the other symbols are as without it."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0, more = inputs(family, output, 40)
    good = demapper(y, n0, **more)
    for argument in ("y", "gain"):
        for part in (0, 1):
            arguments = {"y": y.copy(), "gain": more["gain"].copy()}
            arguments[argument].view(n0.dtype).reshape(-1, 2)[[3, 17, 39], part] = bad
            llr = demapper(n0=n0, prior=more["prior"], **arguments)
            lost = np.isin(np.arange(40), [3, 17, 39])
            assert np.array_equal(llr[~lost], good[~lost])
            erased = np.isnan(llr[lost]) if demapper.dtype.kind == "f" else llr[lost] == 0
            assert erased.all(), (argument, part)


@kernels
def test_no_gain_carries_no_information(family, rule, output):
    """h = 0: the LLR is the prior, or 0 (extrinsic, or without one)."""
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0, more = inputs(family, output, 5)
    h = np.zeros(5, more["gain"].dtype)
    assert (demapper(y, n0, gain=h) == 0).all()
    assert (demapper(y, n0, gain=h, prior=more["prior"], extrinsic=True) == 0).all()
    posterior = demapper(y, n0, gain=h, prior=more["prior"])
    if isinstance(output, Word):
        expected = np.clip(np.rint(more["prior"] / np.float32(output.step)), -output.limit, output.limit)
    else:
        expected = more["prior"]
    assert np.array_equal(posterior, expected)


@pytest.mark.parametrize("argument", ["y", "gain"])
def test_slice_of_non_finite_is_a_label(argument):
    """Label 0 where y or h is not finite, or h = 0; never a fault or a label out of range."""
    y, gain = np.array([0.5 + 0.5j] * 4), np.ones(4, complex)
    {"y": y, "gain": gain}[argument][:3] = [np.nan, np.inf, complex(0, -np.inf)]
    labels = SoftDemapper(C).slice(y, gain=gain)
    assert (labels[:3] == 0).all() and labels[3] == SoftDemapper(C).slice(np.array(0.5 + 0.5j))
    assert SoftDemapper(C).slice(np.array([0.5 + 0.5j]), gain=0.0)[0] == 0


def extremes(output):
    """Finite values of both signs over the type's whole range: subnormal, smallest, ordinary, largest."""
    info = np.finfo(output)
    sizes = [
        0.0,
        info.smallest_subnormal,
        info.tiny,
        np.sqrt(info.tiny),
        1e-3,
        0.7,
        30.0,
        np.sqrt(info.max),
        info.max / 4,
        info.max,
    ]
    values = np.array([s * v for v in sizes for s in (1, -1)], output)
    re, im = np.meshgrid(values, values)
    parts = np.stack([re.ravel(), im.ravel()], -1)
    y = parts.view(np.result_type(output, np.complex64))[:, 0]
    n0 = np.array(
        [info.smallest_subnormal, info.tiny, np.sqrt(info.tiny), 0.1, 50.0, np.sqrt(info.max), info.max],
        output,
    )
    return y, n0


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("rule", ["exact", "max-log", "linear"])
@pytest.mark.parametrize("output", ["float32", "float64"])
def test_finite_input_never_gives_nan(isa, family, rule, output):
    """y, N0, h and priors over the whole range of the type: always finite."""
    if rule == "linear" and family != "fold":
        with pytest.raises(ValueError, match="linear"):
            SoftDemapper(FAMILIES[family], rule=rule)
        return
    demapper = SoftDemapper(FAMILIES[family], rule=rule, output=output)
    y, n0 = extremes(output)
    n = demapper.constellation.bits_per_symbol
    gains = y[np.random.default_rng(1).permutation(y.size)]
    prior = np.random.default_rng(2).choice(y.real, (y.size, n))
    for extrinsic in (False, True):
        for noise in n0:
            for gain in (None, gains):
                for p in (None, prior):
                    llr = demapper(y, noise, gain=gain, prior=p, extrinsic=extrinsic)
                    assert np.isfinite(llr).all(), (noise, gain is None, p is None, extrinsic)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("rule", ["exact", "max-log"])
@pytest.mark.parametrize("output", ["float32", "float64"])
@pytest.mark.parametrize("beyond", ["y", "n0", "gain"])
def test_saturates_to_the_largest_finite(family, rule, output, beyond):
    """LLRs beyond the range are its largest finite value: far samples, a tiny N0, a huge gain.  max-log LLRs
    at N0 = 1 tell the sign; so near to infinite SNR exact ones are equal to them."""
    c = FAMILIES[family]
    info = np.finfo(output)
    y = (0.9 * c.points + 0.013 - 0.006j).astype(np.result_type(output, np.complex64))
    expected = np.sign(SoftDemapper(c, rule="max-log", output=output)(y, 1.0)) * info.max
    demapper = SoftDemapper(c, rule=rule, output=output)
    if beyond == "y":
        far = (c.points * 1000).astype(y.dtype)
        llr = demapper(far, float(info.tiny))
        at_1 = SoftDemapper(c, rule="max-log", output=output)(far, 1.0)
        expected = np.where(np.abs(at_1) > 10, np.sign(at_1) * info.max, llr)
        assert (np.abs(at_1) > 10).mean() > 0.7
    elif beyond == "n0":
        llr = demapper(y, float(info.smallest_subnormal))
    else:
        h = info.max / 16
        llr = demapper(y * y.real.dtype.type(h), 1.0, gain=h)
    assert np.array_equal(llr, expected.astype(output))


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("rule", ["exact", "max-log"])
def test_words_saturate_where_llrs_do(family, rule):
    c = FAMILIES[family]
    word = Word(8, 1e-3)
    counts = SoftDemapper(c, rule=rule, output=word)(c.points, 1e-30)
    assert np.array_equal(counts, np.where(c.bits == 0, 127, -127))


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("output", ["float32", "float64"])
def test_infinite_prior_decides(family, output):
    """A bit known for certain stays so, and the others follow: all finite."""
    demapper = SoftDemapper(FAMILIES[family], output=output)
    n = demapper.constellation.bits_per_symbol
    prior = np.zeros((4, n), output)
    prior[:, 0] = [np.inf, -np.inf, LARGEST[output], -LARGEST[output]]
    llr = demapper(np.full(4, 0.2 + 0.1j), 0.5, prior=prior)
    assert np.isfinite(llr).all() and np.array_equal(np.sign(llr[:, 0]), [1, -1, 1, -1])
    np.testing.assert_array_equal(llr[0, 1:], llr[2, 1:])


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("output", ["float32", "float64", Word(5, 1.0)])
def test_nan_prior_erases_its_symbol(family, output):
    demapper = SoftDemapper(FAMILIES[family], output=output)
    y, n0, more = inputs(family, output, 9)
    good = demapper(y, n0, **more)
    more["prior"][4, 1] = np.nan
    llr = demapper(y, n0, **more)
    rest = np.arange(9) != 4
    assert np.array_equal(llr[rest], good[rest])
    assert (np.isnan(llr[4]) if demapper.dtype.kind == "f" else llr[4] == 0).all()


@pytest.mark.parametrize("shape", [(0,), (3, 0), (0, 4)])
@pytest.mark.parametrize("family", FAMILIES)
def test_empty_input(family, shape):
    demapper = SoftDemapper(FAMILIES[family])
    y = np.empty(shape, np.complex64)
    assert demapper(y, 0.1).shape == (*shape, demapper.constellation.bits_per_symbol)
    assert demapper(y, np.empty(shape)).size == 0
    assert demapper.slice(y).shape == shape
