"""The same bits at every instruction-set level, on every machine, from every compiler.

Outputs for a recipe of inputs are hashed.  The inputs are made from whole numbers by exact operations alone,
so that they are the same everywhere; the hashes in bits.json stand for all levels together.  After a change
of the formulas that is meant,

    python tests/test_bits.py > tests/bits.json

writes them anew, from the portable level.
"""

import hashlib
import json
from pathlib import Path

import numpy as np
import pytest

import pydemap
from pydemap import SoftDemapper, Word

HASHES = Path(__file__).parent / "bits.json"


def whole_numbers(seed, count):
    """`count` integers of 32 bits: a counter, mixed as in MurmurHash3 (64-bit finaliser, public domain)."""
    with np.errstate(over="ignore"):
        z = np.arange(seed * 2**32, seed * 2**32 + count, dtype=np.uint64) + np.uint64(0x9E3779B97F4A7C15)
        z = (z ^ (z >> np.uint64(33))) * np.uint64(0xFF51AFD7ED558CCD)
        z = (z ^ (z >> np.uint64(33))) * np.uint64(0xC4CEB9FE1A85EC53)
    return (z ^ (z >> np.uint64(33))) >> np.uint64(32)


def fractions(seed, count):
    """Multiples of 2^-23 in -1 .. 1: exact in float32."""
    return (whole_numbers(seed, count) >> np.uint64(8)).astype(np.float64) * 2.0**-23 - 1


def integer_points(order, spread):
    """Distinct points on whole coordinates, as no grid, with mixed labels."""
    numbers = whole_numbers(order, 40 * order)
    places = list(
        dict.fromkeys(zip((numbers % spread).tolist(), (numbers // spread % spread).tolist(), strict=True))
    )
    points = np.array([complex(a, b) for a, b in places[:order]]) - (spread // 2) * (1 + 1j)
    return pydemap.Constellation(points, np.argsort(whole_numbers(order + 1, order), kind="stable"))


CONSTELLATIONS = {
    "2 points": lambda: pydemap.Constellation([-1 + 0.5j, 1], [0, 1]),
    **{f"square {m}": lambda m=m: pydemap.square_qam(m) for m in (4, 16, 64, 256, 1024, 4096)},
    "16 x 2": lambda: pydemap.rectangular_qam(16, 2),
    "3GPP 256": lambda: pydemap.published_mapping("3GPP TS 38.211", 256),
    **{f"cross {m}": lambda m=m: pydemap.cross_qam(m) for m in (8, 32, 128, 512, 2048)},
    **{f"ITU-T {m}": lambda m=m: pydemap.published_mapping("ITU-T G.9701", m) for m in (8, 32, 64, 128)},
    "16 integer points": lambda: integer_points(16, 9),
    "256 integer points": lambda: integer_points(256, 64),
}
OUTPUTS = {"float32": "float32", "float64": "float64", "word 6": Word(6, 0.5), "word 12": Word(12, 0.03125)}
COUNT = 331  # no multiple of any vector's width


def recipe(constellation, real):
    """y, N0 and the keyword arguments of the calls that are hashed."""
    n = constellation.bits_per_symbol
    size = 2.0 ** np.ceil(np.log2(np.abs(constellation.points).max()))
    # Most samples near the points, some far out, and the values that take branches of their own.
    far = np.where(whole_numbers(3, COUNT) % np.uint64(8) == 0, 64.0, 1.0)
    y = (fractions(1, COUNT) + 1j * fractions(2, COUNT)) * size * far
    y[:8] = [0, np.nan, complex(0, np.inf), 2.0**100, -(2.0**100) * 1j, 2.0**-130, size, -1j * size]
    exponent = whole_numbers(4, COUNT) % np.uint64(32)
    n0 = np.ldexp(size**2 * (1.5 + fractions(5, COUNT) / 2), 6 - exponent.astype(np.int64))
    n0[8:12] = [2.0**-140, 2.0**120, 2.0**-100, 2.0**60]
    gain = 1.25 + fractions(6, COUNT) + 1j * fractions(7, COUNT)
    gain[12:16] = [0, np.nan, 2.0**-70, 2.0**70]
    prior = (8 * fractions(8, COUNT * n)).reshape(COUNT, n)
    prior[16:19] = np.array([np.nan, np.inf, -(2.0**110)])[:, None]
    y, gain = (a.astype(np.result_type(real, np.complex64)) for a in (y, gain))
    n0, prior = n0.astype(real), prior.astype(real)
    yield y, n0[20], {}
    yield y, n0, {}
    yield y, n0, {"gain": gain}
    yield y, n0, {"gain": gain[20], "prior": prior}
    yield y, n0, {"gain": gain, "prior": prior, "extrinsic": True}


def canonical(array):
    """Bytes in little-endian order; a NaN's sign and payload are the machine's own and not promised."""
    if array.dtype.kind == "f":
        array = np.where(np.isnan(array), array.dtype.type(np.nan), array)
    return array.astype(array.dtype.newbyteorder("<")).tobytes()


def digests(name):
    """Hash of each rule and output of a constellation, and of its hard decisions."""
    constellation = CONSTELLATIONS[name]()
    found = {}
    for label, output in OUTPUTS.items():
        real = "float64" if output == "float64" else "float32"
        family = SoftDemapper(constellation, output=output).family
        for rule in ("exact", "max-log", *(["linear"] if family == "fold" else [])):
            total = hashlib.sha256()
            for positive_bit in (0, 1):
                demapper = SoftDemapper(constellation, rule=rule, output=output, positive_bit=positive_bit)
                for y, n0, more in recipe(constellation, real):
                    total.update(canonical(demapper(y, n0, **more)))
            found[f"{rule}, {label}"] = total.hexdigest()[:32]
        if isinstance(output, str):
            total = hashlib.sha256()
            for y, _, more in recipe(constellation, real):
                total.update(
                    canonical(SoftDemapper(constellation, output=output).slice(y, gain=more.get("gain")))
                )
            found[f"slice, {label}"] = total.hexdigest()[:32]
    return found


def test_hashes_cover_the_recipe():
    assert set(json.loads(HASHES.read_text())) == set(CONSTELLATIONS)


@pytest.mark.parametrize("name", CONSTELLATIONS)
def test_equal_bits(isa, name):
    assert pydemap.isa() == isa
    assert digests(name) == json.loads(HASHES.read_text())[name]


if __name__ == "__main__":
    pydemap.use_isa("baseline")
    print(json.dumps({name: digests(name) for name in CONSTELLATIONS}, indent=1))
