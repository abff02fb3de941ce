"""Files in and out: every format, LLR files that equal one library call, and nothing left after a failure."""

import errno
import hashlib
import io
import json
import os
import struct

import numpy as np
import pytest
import sigmf
import sigmf.validate
from hypothesis import given, settings
from hypothesis import strategies as st

import pydemap
from pydemap import recording
from pydemap.recording import RecordingError, demap_recording, open_gain, open_noise_variance, open_samples

# One sample, 1 - 0.5j, written out by hand from IEEE 754 and two's complement.
HAND_WRITTEN = {
    "cf32_le": bytes.fromhex("0000803f 000000bf"),
    "cf32_be": bytes.fromhex("3f800000 bf000000"),
    "cf64_le": bytes.fromhex("000000000000f03f 000000000000e0bf"),
    "cf64_be": bytes.fromhex("3ff0000000000000 bfe0000000000000"),
    "ci16_le": bytes.fromhex("ff7f 00c0"),  # full scale is 32767 / 32768
    "ci16_be": bytes.fromhex("7fff c000"),
}
STORED = {"cf32": "f4", "cf64": "f8", "ci16": "i2"}


def noisy_16qam(symbols, seed=0):
    rng = np.random.default_rng(seed)
    sent = rng.choice(pydemap.square_qam(16).points, symbols)
    noise = rng.normal(scale=0.2, size=(symbols, 2)) @ [1, 1j]
    return (sent + noise).astype(np.complex64)


def raw_bytes(samples, sample_type):
    kind, order = sample_type.split("_")
    values = samples.astype(np.complex128).view(np.float64)
    if kind == "ci16":
        values = np.rint(values * 8192)
    return values.astype({"le": "<", "be": ">"}[order] + STORED[kind]).tobytes()


def write_sigmf(stem, data, sample_type="cf32_le", **fields):
    metadata = {
        "global": {"core:datatype": sample_type, "core:version": "1.2.0", **fields},
        "captures": [{"core:sample_start": 0}],
        "annotations": [],
    }
    stem.with_name(stem.name + ".sigmf-meta").write_text(json.dumps(metadata))
    stem.with_name(stem.name + ".sigmf-data").write_bytes(data)


def read_all(stream, block=1000):
    with stream:
        blocks = []
        while len(block_read := stream.read(block)):
            blocks.append(block_read)
        return np.concatenate(blocks) if blocks else np.empty(0, stream.dtype)


def listing(directory):
    return sorted(path.name for path in directory.iterdir())


# ---- reading samples


@pytest.mark.parametrize("sample_type", recording.SAMPLE_TYPES)
def test_sample_types_and_byte_orders(tmp_path, sample_type):
    (tmp_path / "one.bin").write_bytes(HAND_WRITTEN[sample_type])
    with open_samples(tmp_path / "one.bin", sample_type) as stream:
        assert stream.length == 1
        sample = stream.read(5)
    assert sample.dtype == (np.complex128 if "64" in sample_type else np.complex64)
    assert sample.tolist() == [(32767 / 32768 if "ci16" in sample_type else 1) - 0.5j]


@pytest.mark.parametrize("sample_type", recording.SAMPLE_TYPES)
@pytest.mark.parametrize("name", ["rec.sigmf-meta", "rec.sigmf-data", "rec"])
def test_sigmf_is_read_as_raw_is(tmp_path, sample_type, name):
    data = raw_bytes(noisy_16qam(2500), sample_type)
    write_sigmf(tmp_path / "rec", data, sample_type)
    (tmp_path / f"rec.{sample_type}").write_bytes(data)
    raw = read_all(open_samples(tmp_path / f"rec.{sample_type}"))
    assert len(raw) == 2500
    np.testing.assert_array_equal(read_all(open_samples(tmp_path / name)), raw)


def test_integers_are_scaled_exactly(tmp_path):
    values = [-32768, -1, 0, 1, 12345, 32767]
    (tmp_path / "x.ci16_le").write_bytes(struct.pack("<6h", *values))
    expected = [complex(*pair) / 32768 for pair in zip(values[::2], values[1::2], strict=True)]
    assert read_all(open_samples(tmp_path / "x.ci16_le")).tolist() == expected


def test_recordings_of_the_sigmf_package_are_read(tmp_path):
    samples = noisy_16qam(300)
    samples.tofile(tmp_path / "theirs.sigmf-data")
    theirs = sigmf.SigMFFile(
        data_file=str(tmp_path / "theirs.sigmf-data"), global_info={"core:datatype": "cf32_le"}
    )
    theirs.add_capture(0)
    theirs.tofile(str(tmp_path / "theirs.sigmf-meta"))
    np.testing.assert_array_equal(read_all(open_samples(tmp_path / "theirs")), samples)


def test_recordings_written_are_valid_and_read_by_the_sigmf_package(tmp_path):
    samples = noisy_16qam(300)
    recording.write_sigmf(tmp_path / "ours", samples, fields={"core:sample_rate": 1e6})
    sigmf.validate.validate(json.loads((tmp_path / "ours.sigmf-meta").read_text()))
    theirs = sigmf.fromfile(str(tmp_path / "ours.sigmf-meta"))  # checks core:sha512 too
    np.testing.assert_array_equal(theirs.read_samples(), samples)
    np.testing.assert_array_equal(read_all(open_samples(tmp_path / "ours")), samples)


def test_a_dataset_of_another_name_is_found(tmp_path):
    samples = noisy_16qam(10)
    write_sigmf(tmp_path / "rec", b"", **{"core:dataset": "capture.bin"})
    samples.tofile(tmp_path / "capture.bin")
    np.testing.assert_array_equal(read_all(open_samples(tmp_path / "rec")), samples)


@pytest.mark.parametrize("dtype", ["<c8", ">c8", "<c16", ">c16"])
@pytest.mark.parametrize("version", [(1, 0), (2, 0)])
def test_npy_samples(tmp_path, dtype, version):
    samples = noisy_16qam(1500).astype(dtype)
    with open(tmp_path / "y.npy", "wb") as file:
        np.lib.format.write_array(file, samples, version=version)
    with open_samples(tmp_path / "y.npy") as stream:
        assert stream.length == 1500
        assert stream.dtype.isnative
        np.testing.assert_array_equal(read_all(stream), samples)


@pytest.mark.parametrize(
    "text",
    [
        "1.5,-0.25\n-1e-3,2\nnan,inf\n",
        "1.5 , -0.25\r\n\r\n# a remark\r\n-1e-3,2\r\nnan,inf",
        "I,Q\n1.5,-0.25\n-1e-3,2\nnan,inf\n",
        "\ufeff# from a spreadsheet\nre,im\n1.5,-0.25\n-1e-3,2\nnan,inf\n",
        "1.5-0.25j\n(-1e-3+2j)\nnan+infj\n",
        "sample\n1.5-0.25i\n-1e-3+2i\nnan+infi\n",
    ],
)
def test_csv_samples(tmp_path, text):
    (tmp_path / "y.csv").write_text(text, encoding="utf-8")
    samples = read_all(open_samples(tmp_path / "y.csv"))
    assert samples.dtype == np.complex128
    np.testing.assert_array_equal(samples, [1.5 - 0.25j, -1e-3 + 2j, complex("nan+infj")])


def test_a_first_sample_that_is_no_number_is_not_taken_for_headings(tmp_path):
    (tmp_path / "y.csv").write_text("nan,nan\n1,2\n")
    samples = read_all(open_samples(tmp_path / "y.csv"))
    np.testing.assert_array_equal(samples, [complex("nan+nanj"), 1 + 2j])


def test_savetxt_is_read_back_exactly(tmp_path):
    samples = noisy_16qam(50).astype(np.complex128)
    np.savetxt(tmp_path / "y.csv", samples)
    np.testing.assert_array_equal(read_all(open_samples(tmp_path / "y.csv")), samples)


@given(steps=st.lists(st.tuples(st.booleans(), st.integers(0, 40)), max_size=12))
@settings(derandomize=True, max_examples=60, deadline=None)
@pytest.mark.parametrize("suffix", ["npy", "csv"])
def test_any_order_of_reading_and_peeking_gives_the_stream(tmp_path_factory, suffix, steps):
    samples = noisy_16qam(100).astype(np.complex128)
    path = tmp_path_factory.mktemp("stream") / f"y.{suffix}"
    if suffix == "npy":
        np.save(path, samples)
    else:
        np.savetxt(path, samples)
    place = 0
    with open_samples(path) as stream:
        for peeks, count in steps:
            block = stream.peek(count) if peeks else stream.read(count)
            np.testing.assert_array_equal(block, samples[place : place + count])
            place += 0 if peeks else len(block)
        np.testing.assert_array_equal(stream.read(1000), samples[place:])


# ---- reading noise variances and constellations


@pytest.mark.parametrize("dtype", ["<f4", ">f4", "<f8", ">f8"])
def test_npy_noise_variances(tmp_path, dtype):
    values = np.linspace(0.1, 2, 77).astype(dtype)
    np.save(tmp_path / "n0.npy", values)
    read = read_all(open_noise_variance(tmp_path / "n0.npy"))
    assert read.dtype == values.dtype.newbyteorder("=")
    np.testing.assert_array_equal(read, values)


def test_raw_and_text_noise_variances(tmp_path):
    (tmp_path / "n0.f32").write_bytes(struct.pack("<3f", 0.5, 1, 2))
    (tmp_path / "n0.f64").write_bytes(struct.pack("<3d", 0.5, 1, 2))
    (tmp_path / "n0.csv").write_text("N0\n0.5\n1\n2\n")
    for name, dtype in [("n0.f32", np.float32), ("n0.f64", np.float64), ("n0.csv", np.float64)]:
        read = read_all(open_noise_variance(tmp_path / name))
        assert read.dtype == dtype
        assert read.tolist() == [0.5, 1, 2]


def test_gains_complex_or_real(tmp_path):
    (tmp_path / "h.f32").write_bytes(struct.pack("<3f", 0.5, -1, 2))
    (tmp_path / "h.f64").write_bytes(struct.pack("<3d", 0.5, -1, 2))
    (tmp_path / "h.cf32_be").write_bytes(struct.pack(">6f", 0.5, 0, -1, 0, 2, 0))
    (tmp_path / "h.csv").write_text("gain\n0.5\n-1\n2\n")
    kinds = [("f32", "f4"), ("f64", "f8"), ("cf32_be", "c8"), ("csv", "c16")]
    for dtype in ("f4", "f8", "c8", "c16"):
        for order in "<>":
            np.save(tmp_path / f"{dtype}{'<>'.index(order)}.npy", np.array([0.5, -1, 2], order + dtype))
    files = [(f"h.{kind}", dtype) for kind, dtype in kinds]
    files += [(f"{dtype}{order}.npy", dtype) for dtype in ("f4", "f8", "c8", "c16") for order in (0, 1)]
    for name, dtype in files:
        gains = read_all(open_gain(tmp_path / name))
        assert gains.dtype == dtype
        assert gains.tolist() == [0.5, -1, 2]


def test_constellations_of_the_user(tmp_path):
    constellation = pydemap.published_mapping("ITU-T G.9701", 32)
    rows = zip(constellation.points.tolist(), constellation.labels.tolist(), strict=True)
    lines = [f"{p.real!r},{p.imag!r},{label if label % 2 else f'0b{label:05b}'}" for p, label in rows]
    (tmp_path / "points.csv").write_text("re,im,label\n" + "\n".join(lines))
    np.savez(tmp_path / "points.npz", points=constellation.points, labels=constellation.labels)
    assert recording.read_constellation(tmp_path / "points.csv") == constellation
    assert recording.read_constellation(tmp_path / "points.npz") == constellation


@pytest.mark.parametrize(
    ("name", "content", "message"),
    [
        ("c.csv", b"1,0,0\n-1,0\n", "line 2.*expected re,im,label"),
        ("c.csv", b"1,0,0\n-1,0,01\n", "line 2.*label an integer"),
        ("c.csv", b"1,0,0\n-1,0,0\n", "labels"),
        ("c.csv", b"1,0,0\n-1,0,1\n0,1,2\n", "power of two"),
        ("c.npz", b"PK\x03\x04 and no more", "arrays points and labels"),
        ("c.txt", b"", r"\.csv or \.npz"),
    ],
)
def test_constellations_refused(tmp_path, name, content, message):
    (tmp_path / name).write_bytes(content)
    with pytest.raises(RecordingError, match=f"{name}.*{message}"):
        recording.read_constellation(tmp_path / name)


def test_a_constellation_file_without_labels_is_refused(tmp_path):
    np.savez(tmp_path / "c.npz", points=[1, -1])
    with pytest.raises(RecordingError, match=r"c\.npz.*labels"):
        recording.read_constellation(tmp_path / "c.npz")


# ---- input that is refused, before anything is written


@pytest.mark.parametrize("sample_type", recording.SAMPLE_TYPES)
@pytest.mark.parametrize("container", ["raw", "sigmf"])
def test_truncated_samples_are_refused_at_once(tmp_path, sample_type, container):
    whole = raw_bytes(noisy_16qam(10), sample_type)
    value = len(whole) // 20
    for missing in (1, value):  # inside a value; an odd number of values
        write_sigmf(tmp_path / "y", whole[:-missing], sample_type)
        (tmp_path / f"y.{sample_type}").write_bytes(whole[:-missing])
        name = f"y.{sample_type}" if container == "raw" else "y.sigmf-data"
        with pytest.raises(RecordingError, match=rf"{name}: {len(whole) - missing} bytes .* cut short"):
            open_samples(tmp_path / (name if container == "raw" else "y"))


def test_truncated_npy_is_refused_at_once(tmp_path):
    np.save(tmp_path / "y.npy", noisy_16qam(10))
    whole = (tmp_path / "y.npy").read_bytes()
    (tmp_path / "y.npy").write_bytes(whole[:-8])
    with pytest.raises(RecordingError, match=r"y\.npy: 72 bytes of data; its header promises 10 numbers"):
        open_samples(tmp_path / "y.npy")
    (tmp_path / "y.npy").write_bytes(whole[:20])
    with pytest.raises(RecordingError, match=r"y\.npy: is no \.npy file"):
        open_samples(tmp_path / "y.npy")


@pytest.mark.parametrize(("name", "size"), [("n0.f32", 4), ("n0.f64", 8)])
def test_truncated_noise_variances_are_refused_at_once(tmp_path, name, size):
    (tmp_path / name).write_bytes(bytes(3 * size - 1))
    with pytest.raises(RecordingError, match=rf"{name}.*cut short"):
        open_noise_variance(tmp_path / name)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("1,2\n3,\n", "line 2: '3,': expected two numbers re,im"),
        ("1,2\n3\n", "line 2: '3': expected two numbers re,im"),
        ("1+2j\n3,4\n", "line 2: '3,4': expected one complex number"),
        ("1,2,3\n", "line 1: '1,2,3': expected two numbers re,im"),
        ("1,2\nx,y\n", "line 2: 'x,y': expected two numbers re,im"),
        ("1" * 5000, "line 1: 4096 bytes or more"),
        (b"1,2\n\xff\xfe\n", "is not UTF-8 text"),
    ],
)
def test_malformed_csv(tmp_path, text, message):
    (tmp_path / "y.csv").write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(RecordingError, match=f"y.csv.*{message}"):
        read_all(open_samples(tmp_path / "y.csv"))


def edited(**changes):
    metadata = {
        "global": {"core:datatype": "cf32_le", "core:version": "1.2.0"},
        "captures": [],
        "annotations": [],
    }
    metadata["global"].update(changes)
    return json.dumps(metadata)


@pytest.mark.parametrize(
    ("metadata", "message"),
    [
        ("", "is not valid JSON"),
        ('{"global": {', "is not valid JSON"),
        ("[" * 100_000, "is not valid JSON"),
        (b"\xff\xfe\xfa", "is not UTF-8"),
        ("[]", "expected global to be an object"),
        ("{}", "expected global to be an object"),
        ('{"global": 3}', "expected global to be an object"),
        ('{"global": {}}', "expected core:datatype to be a string"),
        (edited(**{"core:datatype": 7}), "expected core:datatype to be a string"),
        (
            edited(**{"core:datatype": "rf32_le"}),
            "core:datatype rf32_le is not supported; expected one of cf32_le",
        ),
        (edited(**{"core:datatype": "cu8"}), "core:datatype cu8 is not supported"),
        (edited(**{"core:datatype": "cf32"}), "core:datatype cf32 is not supported"),
        (edited(**{"core:num_channels": 2}), "core:num_channels is 2; expected one channel"),
        (edited(**{"core:num_channels": "1"}), "expected core:num_channels to be a positive integer"),
        (edited(**{"core:num_channels": 0}), "expected core:num_channels to be a positive integer"),
        (edited(**{"core:trailing_bytes": 12}), "core:trailing_bytes are not supported"),
        (edited(**{"core:dataset": "../y.bin"}), "expected core:dataset to be the name of a file"),
        (edited(**{"core:sha512": 5}), "expected core:sha512 to be a string"),
        ('{"global": {"core:datatype": "cf32_le"}, "captures": 1}', "expected captures to be an array"),
        (
            '{"global": {"core:datatype": "cf32_le"}, "captures": [{"core:header_bytes": 4}]}',
            "core:header_bytes and core:trailing_bytes are not supported",
        ),
    ],
)
def test_sigmf_metadata_refused(tmp_path, metadata, message):
    write_sigmf(tmp_path / "y", noisy_16qam(4).tobytes())
    (tmp_path / "y.sigmf-meta").write_bytes(metadata if isinstance(metadata, bytes) else metadata.encode())
    with pytest.raises(RecordingError, match=rf"y\.sigmf-meta: .*{message}"):
        open_samples(tmp_path / "y.sigmf-data")


@pytest.mark.parametrize(("missing", "kept"), [("meta", "data"), ("data", "meta")])
def test_half_a_sigmf_recording(tmp_path, missing, kept):
    write_sigmf(tmp_path / "y", noisy_16qam(4).tobytes())
    (tmp_path / f"y.sigmf-{missing}").unlink()
    for name in ("y", f"y.sigmf-{kept}"):
        with pytest.raises(RecordingError, match=rf"y\.sigmf-{missing}: .*(?i:no such file)"):
            open_samples(tmp_path / name)


@pytest.mark.parametrize("name", ["no.npy", "no.csv", "no.cf32_le", "no.sigmf-meta"])
def test_files_that_are_not_there(tmp_path, name):
    with pytest.raises(RecordingError, match=rf"{name}: .*(?i:no such file)"):
        open_samples(tmp_path / name)


@pytest.mark.parametrize(
    ("name", "array", "message"),
    [
        ("y.npy", np.zeros(4), "holds float64, expected complex64 or complex128"),
        ("y.npy", np.zeros((4, 2), np.complex64), "has shape .4, 2., expected one dimension"),
        ("y.npy", np.zeros(4, "<i2,<i2"), "expected complex64 or complex128"),
    ],
)
def test_npy_samples_refused(tmp_path, name, array, message):
    np.save(tmp_path / name, array)
    with pytest.raises(RecordingError, match=f"{name}: .*{message}"):
        open_samples(tmp_path / name)


@pytest.mark.parametrize(
    ("read", "expected"),
    [
        (open_samples, "a SigMF recording, a .npy or .csv file, or raw samples of a named type"),
        (open_gain, "a SigMF recording, a .npy or .csv file, or raw samples of a named type"),
        (open_noise_variance, "noise variances in a .npy, .csv, .f32 or .f64 file"),
        (recording.read_constellation, "labelled points in a .csv or .npz file"),
    ],
)
def test_a_missing_file_or_a_directory_is_none_of_unknown_kind(tmp_path, read, expected):
    (tmp_path / "there").mkdir()
    for name, problem in [("nofile", "No such file or directory"), ("there", "Is a directory")]:
        with pytest.raises(RecordingError) as refused:
            read(tmp_path / name)
        assert str(refused.value) == f"{tmp_path / name}: cannot be read: {problem}; expected {expected}"


def test_kinds_of_file_refused(tmp_path):
    for name in ("y.bin", "y.sigmf", "y.npy"):
        (tmp_path / name).write_bytes(b"")
    with pytest.raises(RecordingError, match=r"y\.bin: .*sample type named, one of cf32_le"):
        open_samples(tmp_path / "y.bin")
    with pytest.raises(RecordingError, match=r"y\.sigmf: is a SigMF archive"):
        open_samples(tmp_path / "y.sigmf")
    with pytest.raises(RecordingError, match=r"y\.npy: states its own type"):
        open_samples(tmp_path / "y.npy", "cf32_le")
    with pytest.raises(RecordingError, match="'cf16_le': expected one of cf32_le"):
        open_samples(tmp_path / "y.bin", "cf16_le")
    with pytest.raises(RecordingError, match="standard input: name its sample type"):
        open_samples("-")
    with pytest.raises(RecordingError, match=r"y\.bin: expected noise variances in a"):
        open_noise_variance(tmp_path / "y.bin")
    with pytest.raises(RecordingError, match="cannot be read: Is a directory"):
        open_samples(tmp_path, "cf32_le")


# ---- LLR files


@pytest.fixture
def small_blocks(monkeypatch):
    monkeypatch.setattr(recording, "BLOCK_SYMBOLS", 700)
    monkeypatch.setattr(recording, "_BLOCK_OPERATIONS", 700 * 16)


DEMAPPERS = {
    "fold": lambda **kw: pydemap.SoftDemapper(pydemap.square_qam(16), **kw),
    "boxes": lambda **kw: pydemap.SoftDemapper(pydemap.cross_qam(32), **kw),
    "points": lambda **kw: pydemap.SoftDemapper(
        pydemap.Constellation(np.exp(2j * np.pi * np.arange(32) / 32), np.arange(32) ^ (np.arange(32) >> 1)),
        **kw,
    ),
}


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize(
    "output", ["float32", "float64", pydemap.Word(6, 0.5), pydemap.Word(12, 0.01)], ids=str
)
@pytest.mark.parametrize("family", DEMAPPERS)
@pytest.mark.parametrize("per_symbol", [False, True])
def test_an_llr_file_equals_one_library_call(tmp_path, family, output, per_symbol):
    demapper = DEMAPPERS[family](output=output, rule="max-log" if per_symbol else "exact")
    assert demapper.family == family
    y = noisy_16qam(2500)
    y[1234] = complex("nan")
    rng = np.random.default_rng(1)
    n0 = rng.uniform(0.01, 2, 2500)
    h = rng.normal(size=(2500, 2)) @ [1, 1j]
    np.save(tmp_path / "y.npy", y)
    np.save(tmp_path / "h.npy", h)
    np.save(tmp_path / "n0.npy", n0)
    with (
        open_samples(tmp_path / "y.npy") as samples,
        open_samples(tmp_path / "h.npy") as gain,
        open_noise_variance(tmp_path / "n0.npy") as noise,
    ):
        demap_recording(
            demapper,
            samples,
            tmp_path / "out.npy",
            noise_variance=noise if per_symbol else 0.1,
            gain=gain if per_symbol else None,
            threads=2,
        )
    expected = demapper(y, n0, gain=h) if per_symbol else demapper(y, 0.1)
    written = np.load(tmp_path / "out.npy")
    assert written.dtype == expected.dtype
    assert written.shape == expected.shape
    assert written.tobytes() == expected.tobytes()
    assert listing(tmp_path) == ["h.npy", "n0.npy", "out.npy", "out.npy.json", "y.npy"]


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize("name", ["y.npy", "y.csv", "y.sigmf-data", "y.cf32_le"])
@pytest.mark.parametrize("target", ["out.npy", "out.f32"])
def test_every_kind_of_input_gives_the_same_values(tmp_path, name, target):
    y = noisy_16qam(1500)
    np.save(tmp_path / "y.npy", y)
    np.savetxt(tmp_path / "y.csv", y.astype(np.complex128))
    recording.write_sigmf(tmp_path / "y", y)
    y.tofile(tmp_path / "y.cf32_le")
    demapper = DEMAPPERS["fold"]()
    with open_samples(tmp_path / name) as samples:
        statement = demap_recording(demapper, samples, tmp_path / target, noise_variance=0.1)
    values = demapper(y, 0.1).astype("<f4").tobytes()
    content = (tmp_path / target).read_bytes()
    assert content[-len(values) :] == values
    assert len(content) == len(values) + (128 if target == "out.npy" else 0)
    assert statement["data"]["sha256"] == hashlib.sha256(values).hexdigest()
    assert statement["data"]["shape"] == [1500, 4]
    assert json.loads((tmp_path / f"{target}.json").read_text()) == statement


@pytest.mark.parametrize("dtype", ["float32", "float64", "int8", "int16"])
@pytest.mark.parametrize("symbols", [0, 1, 10**18])
def test_the_npy_header_is_one_that_numpy_reads(dtype, symbols):
    header = recording._npy_header(np.dtype(dtype).newbyteorder("<"), (symbols, 16))
    assert len(header) == 128
    file = io.BytesIO(header)
    assert np.lib.format.read_magic(file) == (1, 0)
    assert np.lib.format.read_array_header_1_0(file) == ((symbols, 16), False, np.dtype(dtype))
    assert file.read() == b""


def test_an_empty_recording_gives_an_empty_array(tmp_path):
    (tmp_path / "y.cf32_le").write_bytes(b"")
    with open_samples(tmp_path / "y.cf32_le") as samples:
        demap_recording(DEMAPPERS["fold"](), samples, tmp_path / "out.npy", noise_variance=0.1)
    assert np.load(tmp_path / "out.npy").shape == (0, 4)


@pytest.mark.parametrize("positive_bit", [0, 1])
@pytest.mark.parametrize("output", ["float64", pydemap.Word(5, 0.75)], ids=str)
def test_the_sidecar_alone_explains_the_file(tmp_path, output, positive_bit):
    """LLRs recomputed from nothing but the sidecar and the samples it names."""
    original = pydemap.SoftDemapper(
        pydemap.published_mapping("ITU-T G.9701", 32),
        rule="max-log",
        output=output,
        positive_bit=positive_bit,
    )
    noisy_16qam(400).tofile(tmp_path / "y.cf32_le")
    with open_samples(tmp_path / "y.cf32_le") as samples:
        demap_recording(
            original, samples, tmp_path / "llr.raw", noise_variance=0.07, constellation_name="ITU"
        )
    said = json.loads((tmp_path / "llr.raw.json").read_text())

    points = [complex(*point) for point in said["constellation"]["points"]]
    word = said["output"].get("bits")
    rebuilt = pydemap.SoftDemapper(
        pydemap.Constellation(points, said["constellation"]["labels"]),
        rule=said["llr"]["rule"],
        output=pydemap.Word(word, said["output"]["step"]) if word else said["output"]["type"],
        positive_bit=said["llr"]["positive_means_bit"],
    )
    assert rebuilt == original
    y = read_all(open_samples(said["samples"]["file"]))
    stored = np.fromfile(tmp_path / said["data"]["file"], said["data"]["type"]).reshape(said["data"]["shape"])
    np.testing.assert_array_equal(stored, rebuilt(y, said["channel"]["noise_value"]))
    assert said["written_by"] == f"pydemap {pydemap.__version__}"
    assert said["symbols"] == 400
    assert said["constellation"]["name"] == "ITU"
    assert said["data"]["byte_order"] == "little-endian"
    sign = (
        "ln P(b_k = 1 given y) - ln P(b_k = 0 given y)"
        if positive_bit
        else "ln P(b_k = 0 given y) - ln P(b_k = 1"
    )
    assert sign in said["llr"]["definition"]
    if word:
        assert said["output"]["rounding"] == "to nearest, halves to even"
        assert said["output"]["saturation"] == "symmetric, at -15 and 15"
    else:
        assert "rounding" not in said["output"]


# ---- runs that fail leave nothing, and what was there before stays


def fails(tmp_path, message, **changes):
    """Run a job that must fail: the directory is afterwards as it was."""
    before = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    arguments = {
        "demapper": DEMAPPERS["fold"](),
        "target": tmp_path / "out.npy",
        "noise_variance": 0.1,
        **changes,
    }
    with pytest.raises(RecordingError, match=message):
        demap_recording(**arguments)
    assert {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()} == before


@pytest.fixture
def job(tmp_path):
    noisy_16qam(2500).tofile(tmp_path / "y.cf32_le")
    (tmp_path / "out.npy").write_bytes(b"an older run")
    (tmp_path / "out.npy.json").write_bytes(b"its sidecar")
    with open_samples(tmp_path / "y.cf32_le") as samples:
        yield samples


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf])
@pytest.mark.parametrize("index", [0, 699, 700, 2499])
def test_a_bad_noise_variance_is_named(tmp_path, job, bad, index):
    values = np.full(2500, 0.1)
    values[index] = bad
    np.save(tmp_path / "n0.npy", values)
    with open_noise_variance(tmp_path / "n0.npy") as noise:
        fails(
            tmp_path, rf"n0\.npy: noise variance {bad} at index {index};", samples=job, noise_variance=noise
        )


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize("length", [0, 1, 700, 2499, 2501, 5000])
@pytest.mark.parametrize("suffix", ["npy", "csv"])  # length known beforehand, and not
def test_files_of_unequal_length(tmp_path, job, length, suffix):
    for name, values in (("n0", np.full(length, 0.1)), ("h", np.ones(length, np.complex128))):
        path = tmp_path / f"{name}.{suffix}"
        if suffix == "npy":
            np.save(path, values)
        else:
            np.savetxt(path, values)
    said = length if suffix == "npy" or length < 2500 else "at least 2501"
    with open_noise_variance(tmp_path / f"n0.{suffix}") as noise:
        fails(tmp_path, f"n0.{suffix}: {said} numbers; .*2500 symbols", samples=job, noise_variance=noise)
    with open_samples(tmp_path / "y.cf32_le") as samples, open_samples(tmp_path / f"h.{suffix}") as gain:
        fails(tmp_path, f"h.{suffix}: {said} numbers; .*2500 symbols", samples=samples, gain=gain)


@pytest.mark.usefixtures("small_blocks")
def test_a_text_cut_short_late_in_the_file(tmp_path):
    lines = [f"{value.real},{value.imag}" for value in noisy_16qam(2500).tolist()]
    (tmp_path / "y.csv").write_text("\n".join(lines)[: -len(lines[-1].split(",")[1])])
    with open_samples(tmp_path / "y.csv") as samples:
        fails(tmp_path, "y.csv, line 2500: .*expected two numbers", samples=samples)


@pytest.mark.usefixtures("small_blocks")
def test_data_that_are_not_those_of_the_metadata(tmp_path):
    recording.write_sigmf(tmp_path / "y", noisy_16qam(2500))
    data = bytearray((tmp_path / "y.sigmf-data").read_bytes())
    data[-1] ^= 1
    (tmp_path / "y.sigmf-data").write_bytes(data)
    with open_samples(tmp_path / "y") as samples:
        fails(tmp_path, r"y\.sigmf-data: its SHA-512 is not the core:sha512", samples=samples)


@pytest.mark.usefixtures("small_blocks")
def test_a_file_that_shrinks_while_it_is_read(tmp_path, job):
    os.truncate(tmp_path / "y.cf32_le", 1000 * 8)
    fails(tmp_path, r"y\.cf32_le: ended after 1000 of 2500 numbers", samples=job)


def test_targets_that_cannot_be_written(tmp_path, job):
    (tmp_path / "directory").mkdir()
    (tmp_path / "half.npy.json").mkdir()
    for target, message in [
        ("directory", "directory: cannot be written: it exists and is not a regular file"),
        ("half.npy", r"half\.npy\.json: cannot be written: it exists and is not a regular file"),
        ("y.cf32_le/out.npy", r"out\.npy: cannot be written: .*y\.cf32_le is not a directory"),
        ("nowhere/out.npy", r"out\.npy: cannot be written: .*nowhere is not a directory"),
        ("out.csv", r"out\.csv: expected a name in \.npy"),
        ("n" * 300, "cannot be written"),
    ]:
        fails(tmp_path, message, samples=job, target=tmp_path / target)
    assert listing(tmp_path) == ["directory", "half.npy.json", "out.npy", "out.npy.json", "y.cf32_le"]


def test_a_device_is_no_target(tmp_path, job):
    fails(tmp_path, "/dev/null: cannot be written", samples=job, target="/dev/null")


def test_an_input_is_not_overwritten(tmp_path, job):
    os.link(tmp_path / "y.cf32_le", tmp_path / "also.raw")
    np.save(tmp_path / "n0.npy", np.full(2500, 0.1))
    (tmp_path / "y2.npy.json").symlink_to(tmp_path / "n0.npy")
    for target in ("y.cf32_le", "also.raw"):
        fails(tmp_path, r"y\.cf32_le: is read in this run", samples=job, target=tmp_path / target)
    with open_noise_variance(tmp_path / "n0.npy") as noise:
        for target in ("n0.npy", "y2.npy"):
            message = r"n0\.npy: is read in this run"
            fails(tmp_path, message, samples=job, target=tmp_path / target, noise_variance=noise)


class FullDisk(io.FileIO):
    """A file on a disk with so many bytes left."""

    left = 0

    def write(self, data):
        size = memoryview(data).nbytes
        if size > FullDisk.left:
            super().write(memoryview(data).cast("B")[: FullDisk.left])
            FullDisk.left = 0
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        FullDisk.left -= size
        return super().write(data)


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize("left", [0, 100, 20_000, 40_128, 40_500])  # header, data, data, sidecar, sidecar
def test_a_full_disk(tmp_path, job, monkeypatch, left):
    def open_on_full_disk(path, mode):
        return io.BufferedWriter(FullDisk(path, mode)) if mode == "xb" else open(path, mode)

    monkeypatch.setattr(recording, "open", open_on_full_disk, raising=False)
    monkeypatch.setattr(FullDisk, "left", left)
    fails(tmp_path, r"out\.npy.* cannot be written: No space left on device", samples=job)
    assert FullDisk.left == 0


@pytest.mark.usefixtures("small_blocks")
@pytest.mark.parametrize("after", [1, 4])
def test_an_interruption(tmp_path, job, after):
    calls = []

    def interrupt(symbols):
        calls.append(symbols)
        if len(calls) == after:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        demap_recording(
            DEMAPPERS["fold"](), job, tmp_path / "out.npy", noise_variance=0.1, progress=interrupt
        )
    assert listing(tmp_path) == ["out.npy", "out.npy.json", "y.cf32_le"]
    assert (tmp_path / "out.npy").read_bytes() == b"an older run"
    assert (tmp_path / "out.npy.json").read_bytes() == b"its sidecar"


def test_a_failure_between_the_two_renames_leaves_neither(tmp_path, job, monkeypatch):
    replace = os.replace

    def replace_once(source, target):
        if str(target).endswith(".json"):
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        replace(source, target)

    monkeypatch.setattr(os, "replace", replace_once)
    (tmp_path / "out.npy").unlink()
    (tmp_path / "out.npy.json").unlink()
    fails(tmp_path, "cannot be written: Input/output error", samples=job)


def test_progress_counts_all_symbols(tmp_path, job):
    counts = []
    demap_recording(
        DEMAPPERS["fold"](), job, tmp_path / "out.npy", noise_variance=0.1, progress=counts.append
    )
    assert sum(counts) == 2500


def test_a_linked_target_stays_a_link(tmp_path, job):
    (tmp_path / "store").mkdir()
    (tmp_path / "link.npy").symlink_to(tmp_path / "store" / "real.npy")
    demap_recording(DEMAPPERS["fold"](), job, tmp_path / "link.npy", noise_variance=0.1)
    assert (tmp_path / "link.npy").is_symlink()
    assert np.load(tmp_path / "store" / "real.npy").shape == (2500, 4)


def test_new_files_have_the_permissions_of_any_other(tmp_path, job):
    (tmp_path / "other").write_bytes(b"")
    demap_recording(DEMAPPERS["fold"](), job, tmp_path / "out.npy", noise_variance=0.1)
    for name in ("out.npy", "out.npy.json"):
        assert (tmp_path / name).stat().st_mode == (tmp_path / "other").stat().st_mode
