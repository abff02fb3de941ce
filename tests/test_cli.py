"""The commands: what they write, print and return, and that a failed or stopped run leaves nothing."""

import json
import os
import pty
import re
import resource
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
import sigmf.validate
from scipy.special import ndtri

import pydemap
from pydemap import demo as scenario
from pydemap import recording
from pydemap.cli import main

COMMAND = [sys.executable, "-m", "pydemap.cli"]
N = 2000
BLOCK = recording.BLOCK_SYMBOLS


def noisy(constellation, symbols=N, seed=0, scale=0.15):
    rng = np.random.default_rng(seed)
    noise = rng.normal(scale=scale, size=(symbols, 2)) @ [1, 1j]
    return (rng.choice(constellation.points, symbols) + noise).astype(np.complex64)


def listing(directory):
    return sorted(path.name for path in directory.iterdir())


@pytest.fixture
def work(tmp_path, monkeypatch):
    """An empty directory to be in."""
    monkeypatch.chdir(tmp_path)
    return tmp_path


def run(command):
    return main(command.split() if isinstance(command, str) else command)


# ---- llr


@pytest.mark.parametrize(
    ("options", "demapper", "n0"),
    [
        ("--order 16 --n0 0.05", lambda: pydemap.SoftDemapper(pydemap.square_qam(16)), 0.05),
        ("--order 32 --n0 0.05 --threads 2", lambda: pydemap.SoftDemapper(pydemap.cross_qam(32)), 0.05),
        ("--order 8 --n0 0.05", lambda: pydemap.SoftDemapper(pydemap.cross_qam(8)), 0.05),
        ("--order 16 --es-n0-db 20", lambda: pydemap.SoftDemapper(pydemap.square_qam(16)), 0.01),
        (
            "--order 64 --n0 0.05 --rule max-log --output float64 --positive-bit 1",
            lambda: pydemap.SoftDemapper(
                pydemap.square_qam(64), rule="max-log", output="float64", positive_bit=1
            ),
            0.05,
        ),
        (
            "--order 64 --n0 0.05 --rule linear --output 6:0.5",
            lambda: pydemap.SoftDemapper(pydemap.square_qam(64), rule="linear", output=pydemap.Word(6, 0.5)),
            0.05,
        ),
        (
            "--order 4 --n0 0.05 --output 11:0.125",
            lambda: pydemap.SoftDemapper(pydemap.square_qam(4), output=pydemap.Word(11, 0.125)),
            0.05,
        ),
    ],
)
def test_llr_is_the_library_call(work, options, demapper, n0):
    y = noisy(pydemap.square_qam(16))
    np.save("y.npy", y)
    assert run(f"llr y.npy out.npy {options}") == 0
    expected = demapper()(y, n0)
    written = np.load("out.npy")
    assert written.dtype == expected.dtype
    assert written.tobytes() == expected.tobytes()
    assert listing(work) == ["out.npy", "out.npy.json", "y.npy"]


def test_llr_over_several_blocks(work):
    """Whole blocks and a part, with gain and noise variance of each symbol, are one library call."""
    y = noisy(pydemap.square_qam(16), BLOCK + 12345)
    rng = np.random.default_rng(3)
    h = (rng.normal(size=(len(y), 2)) @ [1, 1j]).astype(np.complex64)
    n0 = rng.uniform(0.01, 1, len(y)).astype(np.float32)
    recording.write_sigmf("y", y)
    h.tofile("h.cf32_le")
    n0.astype("<f4").tofile("n0.f32")
    assert run("llr y out.raw --order 16 --n0-file n0.f32 --gain-file h.cf32_le") == 0
    expected = pydemap.SoftDemapper(pydemap.square_qam(16))(y, n0, gain=h)
    assert (work / "out.raw").read_bytes() == expected.astype("<f4").tobytes()


def test_llr_with_a_mapping_of_a_standard(work):
    constellation = pydemap.published_mapping("3GPP TS 38.211", 64)
    y = noisy(constellation)
    np.save("y.npy", y)
    command = ["llr", "y.npy", "out.npy", "--order", "64", "--mapping", "3GPP TS 38.211", "--n0", "0.02"]
    assert run(command) == 0
    np.testing.assert_array_equal(np.load("out.npy"), pydemap.SoftDemapper(constellation)(y, 0.02))
    assert (
        json.loads((work / "out.npy.json").read_text())["constellation"]["name"]
        == "3GPP TS 38.211, 64 points"
    )


def test_llr_with_points_of_the_users_own(work):
    """Es/N0 is then relative to the mean energy of those points."""
    constellation = pydemap.Constellation([3, 1, -1, -3], [0, 1, 3, 2])
    (work / "ask.csv").write_text("# mean energy 5\n3,0,0b00\n1,0,0b01\n-1,0,0b11\n-3,0,0b10\n")
    y = noisy(constellation)
    np.save("y.npy", y)
    assert run("llr y.npy out.npy --points ask.csv --es-n0-db 10") == 0
    np.testing.assert_array_equal(np.load("out.npy"), pydemap.SoftDemapper(constellation)(y, 0.5))


@pytest.mark.parametrize("gain", [False, True])
def test_llr_with_an_estimated_noise_variance(work, capsys, gain):
    constellation = pydemap.square_qam(16)
    h = np.full(N, 0.5j, np.complex64) if gain else np.ones(N, np.complex64)
    y = (h * noisy(constellation, scale=0)).astype(np.complex64)
    y += (np.random.default_rng(1).normal(scale=0.05, size=(N, 2)) @ [1, 1j]).astype(np.complex64)
    np.save("y.npy", y)
    np.save("h.npy", h)
    more = ["--gain-file", "h.npy"] if gain else []
    assert run(["llr", "y.npy", "out.npy", "--order", "16", "--estimate-n0", *more]) == 0
    n0 = pydemap.estimate_noise_variance(y, constellation, gain=h if gain else None)
    assert 0.8 * 2 * 0.05**2 < n0 < 1.2 * 2 * 0.05**2
    assert f"estimated N0 = {n0!r}" in capsys.readouterr().out
    expected = pydemap.SoftDemapper(constellation)(y, n0, gain=h if gain else None)
    np.testing.assert_array_equal(np.load("out.npy"), expected)
    said = json.loads((work / "out.npy.json").read_text())["channel"]
    assert said["noise_value"] == n0
    assert said["noise_origin"] == f"estimated from {N} of the first {N} symbols, evenly picked"


@pytest.mark.parametrize(("order", "used"), [(16, 4990), (1024, 4096)])  # max(1024, 2^22 / M), or all
def test_the_sidecar_says_how_many_symbols_an_estimate_comes_from(work, order, used):
    """That many finite symbols, evenly picked, are enough to get the same estimate to the bit."""
    constellation = pydemap.square_qam(order)
    y = noisy(constellation, 5000, scale=0.01)
    y[:7] = np.nan
    h = np.ones(len(y), np.float32)
    h[7:10] = np.inf
    h.tofile("h.f32")
    np.save("y.npy", y)
    assert run(f"llr y.npy out.npy --order {order} --estimate-n0 --gain-file h.f32") == 0
    said = json.loads((work / "out.npy.json").read_text())["channel"]
    assert said["noise_origin"] == f"estimated from {used} of the first 5000 symbols, evenly picked"
    pick = y[10:][np.linspace(0, 4989, used).astype(int)]
    assert said["noise_value"] == pydemap.estimate_noise_variance(pick, constellation)


@pytest.mark.parametrize("dtype", ["float32", "float64"])
@pytest.mark.parametrize("kind", ["npy", "raw", "csv"])
def test_llr_with_real_gains(work, dtype, kind):
    y = noisy(pydemap.square_qam(16))
    h = np.random.default_rng(4).normal(size=N).astype(dtype)
    h[:2] = np.nan, np.inf
    if kind == "npy":
        np.save("h.npy", h)
    elif kind == "csv":
        (work / "h.csv").write_text("gain\n" + "".join(f"{value!r}\n" for value in h.tolist()))
    else:
        kind = "f32" if dtype == "float32" else "f64"
        h.tofile(f"h.{kind}")
    np.save("y.npy", y)
    assert run(f"llr y.npy out.npy --order 16 --n0 0.1 --output float64 --gain-file h.{kind}") == 0
    demapper = pydemap.SoftDemapper(pydemap.square_qam(16), output="float64")
    np.testing.assert_array_equal(np.load("out.npy"), demapper(y, 0.1, gain=h))
    assert json.loads((work / "out.npy.json").read_text())["channel"]["gain"] == f"h.{kind}"


def test_llr_says_what_it_wrote(work, capsys):
    np.save("y [1].npy", noisy(pydemap.square_qam(16)))
    assert run(["llr", "y [1].npy", "out.npy", "--order", "16", "--n0", "1"]) == 0
    output = capsys.readouterr()
    assert output.out == "2000 symbols, 8000 LLRs in out.npy, explained by out.npy.json\n"
    assert output.err == ""


@pytest.mark.parametrize("sample_type", ["cf32_le", "ci16_be"])
def test_llr_from_standard_input(work, sample_type):
    y = noisy(pydemap.square_qam(16))
    if sample_type == "ci16_be":
        integers = np.rint(y.view(np.float32) * 8192).astype(">i2")
        data, y = integers.tobytes(), (integers.astype(np.float32) / 32768).view(np.complex64)
    else:
        data = y.tobytes()
    command = [*COMMAND, "llr", "-", "out.npy", "--order", "16", "--n0", "0.1", "--input-type", sample_type]
    done = subprocess.run(command, input=data, capture_output=True, check=False)
    assert (done.returncode, done.stderr) == (0, b"")
    np.testing.assert_array_equal(np.load("out.npy"), pydemap.SoftDemapper(pydemap.square_qam(16))(y, 0.1))
    assert json.loads((work / "out.npy.json").read_text())["samples"]["file"] == "standard input"


# ---- wrong calls and failing runs: a message, a status, and nothing left


@pytest.mark.parametrize(
    ("command", "message"),
    [
        ("llr y.npy out.npy --order 16", "exactly one of --n0"),
        ("llr y.npy out.npy --order 16 --n0 1 --es-n0-db 3", "exactly one of --n0"),
        ("llr y.npy out.npy --order 16 --n0 1 --estimate-n0", "exactly one of --n0"),
        ("llr y.npy out.npy --order 16 --n0 0", "0.0: expected finite and greater than 0"),
        ("llr y.npy out.npy --order 16 --n0 -1", "-1.0: expected finite and greater than 0"),
        ("llr y.npy out.npy --order 16 --n0 nan", "nan: expected finite and greater than 0"),
        ("llr y.npy out.npy --order 16 --n0 inf", "inf: expected finite and greater than 0"),
        ("llr y.npy out.npy --order 16 --es-n0-db nan", "nan: expected -300 to 300 dB"),
        ("llr y.npy out.npy --order 16 --es-n0-db 1e4", "expected -300 to 300 dB"),
        ("llr y.npy out.npy --n0 1", "expected --order, alone or with --mapping, or --points alone"),
        ("llr y.npy out.npy --n0 1 --points p.csv --order 4", "expected --order, alone or with"),
        ("llr y.npy out.npy --n0 1 --points p.csv --mapping X", "expected --order, alone or with"),
        ("llr y.npy out.npy --n0 1 --order 17", "order of square_qam must be one of"),
        ("llr y.npy out.npy --n0 1 --order 2", "order of cross_qam must be one of"),
        ("llr y.npy out.npy --n0 1 --order -4", "order of"),
        ("llr y.npy out.npy --n0 1 --order 16 --mapping DVB", "document must be one of '3GPP TS 38.211'"),
        ("llr y.npy out.npy --n0 1 --order 32 --rule linear", "rule 'linear' needs a square"),
        ("llr y.npy out.npy --n0 1 --order 16 --rule best", "'best' is not one of"),
        (
            "llr y.npy out.npy --n0 1 --order 16 --output float16",
            "'float16': expected float32, float64 or words of BITS:STEP such as 6:0.5$",
        ),
        *(
            (
                f"llr y.npy out.npy --n0 1 --order 16 --output {given}",
                f"'{given}': expected float32, float64 or words of BITS:STEP such as 6:0.5$",
            )
            for given in ("6", "6:", ":0.5", "6.5:1", "6:0.5:1", "six:0.5")
        ),
        ("llr y.npy out.npy --n0 1 --order 16 --output 17:1", "'17:1': bits must be from 2 to 16, got 17"),
        ("llr y.npy out.npy --n0 1 --order 16 --output 6:0", "'6:0': step must be .*got 0"),
        ("llr y.npy out.npy --n0 1 --order 16 --positive-bit 2", "2 is not in the range"),
        ("llr y.npy out.npy --n0 1 --order 16 --threads 0", "0 is not in the range"),
        ("llr y.npy out.npy --n0 1 --order 16 --input-type cu8", "'cu8' is not one of"),
        ("llr y.npy", "Missing argument 'OUT'"),
        ("show", "expected --order, alone or with --mapping, or --points alone"),
        ("show --order 16 --bit 4 --picture p.png", "bit 4: expected 0 to 3"),
        ("show --order 16 --bit 1", "expected --picture too"),
        ("demo --seed -1", "-1 is not in the range"),
        ("nonsense", "No such command"),
    ],
)
def test_wrong_calls(work, capsys, command, message):
    np.save("y.npy", noisy(pydemap.square_qam(16)))
    assert run(command) == 2
    output = capsys.readouterr()
    assert re.search(message, " ".join(output.err.split()))
    assert output.out == ""
    assert listing(work) == ["y.npy"]


@pytest.mark.parametrize(
    ("command", "message"),
    [
        ("llr no.npy out.npy --order 16 --n0 1", "no.npy: cannot be read: No such file"),
        ("llr cut.cf32_le out.npy --order 16 --n0 1", "cut.cf32_le: 15996 bytes .*cut short"),
        ("llr y.bin out.npy --order 16 --n0 1", "y.bin: a raw file needs its sample type named"),
        (
            "llr nofile out.npy --order 16 --n0 1",
            "nofile: cannot be read: No such file or directory; expected a SigMF recording, a .npy or .csv",
        ),
        (
            "llr . out.npy --order 16 --n0 1",
            r"\.: cannot be read: Is a directory; expected a SigMF recording, a .npy or .csv file",
        ),
        (
            "llr y.npy out.npy --order 16 --n0-file nofile",
            "nofile: cannot be read: No such file or directory; expected noise variances in a .npy",
        ),
        (
            "llr y.npy out.npy --order 16 --n0 1 --gain-file nofile",
            "nofile: cannot be read: No such file or directory; expected",
        ),
        (
            "llr y.npy out.npy --points . --n0 1",
            r"\.: cannot be read: Is a directory; expected labelled points in a .csv or .npz file",
        ),
        ("llr rec out.npy --order 16 --n0 1", "rec.sigmf-meta: core:datatype cu8 is not supported"),
        ("llr y.npy y.npy --order 16 --n0 1", "y.npy: is read in this run"),
        ("llr y.npy no/out.npy --order 16 --n0 1", "no/out.npy: cannot be written: .*no is not a directory"),
        ("llr y.npy y.bin/out.npy --order 16 --n0 1", "y.bin is not a directory"),
        ("llr y.npy . --order 16 --n0 1", "cannot be written: it exists and is not a regular file"),
        (
            "llr y.npy out.npy --order 16 --n0-file short.npy",
            "short.npy: 1999 numbers; .*2000 symbols of y.npy",
        ),
        ("llr y.npy out.npy --order 16 --n0-file zero.npy", "zero.npy: noise variance 0.0 at index 1500"),
        (
            "llr y.npy out.npy --order 16 --n0-file y.npy",
            "y.npy: holds complex64, expected float32 or float64",
        ),
        (
            "llr y.npy out.npy --order 16 --n0 1 --gain-file words.npy",
            "words.npy: holds int16, expected complex64 or complex128 or float32 or float64",
        ),
        ("llr y.npy out.npy --order 16 --n0 1 --gain-file short.npy", "short.npy: 1999 numbers"),
        ("llr y.npy out.npy --order 16 --n0 1 --gain-file cut.f32", "cut.f32: 7998 bytes .*cut short"),
        ("llr y.npy out.npy --points p.csv --n0 1", "p.csv, line 1: .*expected re,im,label"),
        ("llr nan.npy out.npy --order 16 --estimate-n0", "nan.npy: noise variance cannot be estimated"),
        ("llr dead.npy out.npy --order 16 --estimate-n0", "dead.npy: noise variance cannot be estimated"),
        (
            "llr y.npy out.npy --order 16 --estimate-n0 --gain-file nan.npy",
            "nan.npy: 3 numbers; .*2000 symbols",
        ),
        ("show --order 16 --picture p.pdf", "p.pdf: expected the name of a picture to end in .png or .svg"),
        ("show --order 16 --picture no/p.png", "no/p.png: cannot be written"),
        ("demo --directory y.bin", "y.bin: expected a directory"),
        ("demo --directory no/such", "no/such: expected a directory"),
    ],
)
def test_failing_runs(work, capsys, command, message):
    y = noisy(pydemap.square_qam(16))
    np.save("y.npy", y)
    np.save("nan.npy", np.full(3, np.nan, np.complex64))
    np.save("dead.npy", np.zeros(N, np.complex64))
    np.save("short.npy", np.ones(N - 1))
    np.save("words.npy", np.ones(N, np.int16))
    np.save("zero.npy", np.where(np.arange(N) == 1500, 0.0, 1.0))
    (work / "cut.cf32_le").write_bytes(y.tobytes()[:-4])
    (work / "cut.f32").write_bytes(bytes(4 * N - 2))
    (work / "y.bin").write_bytes(y.tobytes())
    (work / "p.csv").write_text("1\n")
    (work / "rec.sigmf-meta").write_text('{"global": {"core:datatype": "cu8"}}')
    before = {name: (work / name).read_bytes() for name in listing(work)}
    assert run(command) == 1
    output = capsys.readouterr()
    assert re.search(f"^pydemap: .*{message}", output.err)
    assert output.err.count("\n") == 1
    assert {name: (work / name).read_bytes() for name in listing(work)} == before


def test_standard_input_that_ends_inside_a_sample(work):
    """Only the end of a pipe tells; several blocks have been written by then."""
    data = noisy(pydemap.square_qam(16), BLOCK + 1000).tobytes()[:-4]
    command = [*COMMAND, "llr", "-", "out.npy", "--order", "16", "--n0", "0.1", "--input-type", "cf32_le"]
    done = subprocess.run(command, input=data, capture_output=True, text=False, check=False)
    assert done.returncode == 1
    assert b"standard input: 2105148 bytes are no whole number of values of 8 bytes each" in done.stderr
    assert listing(work) == []


def test_a_file_system_that_takes_no_more(work):
    """A real write that fails: the kernel's limit on the size of a file stands in for a full disk."""
    np.save("y.npy", noisy(pydemap.square_qam(16), 100_000))
    done = subprocess.run(
        [*COMMAND, "llr", "y.npy", "out.npy", "--order", "16", "--n0", "0.1"],
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, 1_000_000)),
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 1
    assert done.stderr == "pydemap: out.npy and out.npy.json: cannot be written: File too large\n"
    assert listing(work) == ["y.npy"]


@pytest.mark.parametrize(
    ("number", "status", "message"),
    [
        (signal.SIGINT, 130, "pydemap: interrupted; no unfinished file is left\n"),
        (signal.SIGTERM, 143, ""),
        (signal.SIGHUP, 129, ""),
    ],
)
def test_stopped_by_a_signal(work, number, status, message):
    (work / "out.npy").write_bytes(b"an older run")
    command = [*COMMAND, "llr", "-", "out.npy", "--order", "16", "--n0", "0.1", "--input-type", "cf32_le"]
    process = subprocess.Popen(
        command,
        stdin=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=False,
        preexec_fn=lambda: (
            [signal.signal(each, signal.SIG_DFL) for each in (signal.SIGHUP, signal.SIGTERM)]
            and signal.signal(signal.SIGINT, signal.default_int_handler)
        ),
    )
    assert process.stdin is not None
    process.stdin.write(noisy(pydemap.square_qam(16), BLOCK).tobytes())
    process.stdin.flush()

    def partly_written():
        sizes = [path.stat().st_size for path in work.glob(".pydemap-*.partial")]
        return sizes and max(sizes) >= 16 * BLOCK

    deadline = time.monotonic() + 60
    while not partly_written() and process.poll() is None and time.monotonic() < deadline:
        time.sleep(0.01)
    assert partly_written()
    process.send_signal(number)
    _, errors = process.communicate(timeout=60)
    assert process.returncode == status
    assert errors.decode().strip() == message.strip()
    assert listing(work) == ["out.npy"]
    assert (work / "out.npy").read_bytes() == b"an older run"


def test_interrupted_within_the_process(work, capsys, monkeypatch):
    np.save("y.npy", noisy(pydemap.square_qam(16)))

    def interrupt(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr(pydemap.SoftDemapper, "__call__", interrupt)
    assert run("llr y.npy out.npy --order 16 --n0 1") == 130
    assert "interrupted" in capsys.readouterr().err
    assert listing(work) == ["y.npy"]


# ---- terminal or pipe, and what is installed


def test_a_progress_bar_on_a_terminal_alone(work):
    np.save("y.npy", noisy(pydemap.square_qam(16)))
    command = [*COMMAND, "llr", "y.npy", "out.npy", "--order", "16", "--n0", "0.1"]
    done = subprocess.run(command, capture_output=True, check=True, env={**os.environ, "FORCE_COLOR": "1"})
    assert done.stderr == b""

    ours, theirs = pty.openpty()
    done = subprocess.run(
        command, stderr=theirs, stdout=subprocess.PIPE, check=True, env={**os.environ, "TERM": "xterm"}
    )
    os.close(theirs)
    shown = b""
    try:
        while piece := os.read(ours, 65536):
            shown += piece
    except OSError:  # how Linux says that the other end is closed
        pass
    os.close(ours)
    assert b"symbols" in shown
    assert b"2000/2000" in shown
    assert done.stdout.startswith(b"2000 symbols, 8000 LLRs")
    np.testing.assert_array_equal(
        np.load("out.npy"), pydemap.SoftDemapper(pydemap.square_qam(16))(np.load("y.npy"), 0.1)
    )


WITHOUT = """
import sys
for name in {missing!r}:
    sys.modules[name] = None
import pydemap, pydemap.cli, pydemap.recording, pydemap.plot
pydemap.SoftDemapper(pydemap.square_qam(16))
sys.exit(pydemap.cli.main({arguments!r}))
"""


@pytest.mark.parametrize(
    ("missing", "arguments", "named"),
    [
        (["click", "rich", "matplotlib", "sigmf"], ["show", "--order", "16"], "click"),
        (["rich"], ["show", "--order", "16"], "rich"),
        (["matplotlib"], ["show", "--order", "16", "--picture", "p.png"], "matplotlib"),
    ],
)
def test_a_plain_install_imports_and_says_what_to_install(work, missing, arguments, named):
    code = WITHOUT.format(missing=missing, arguments=arguments)
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert done.stdout == ""
    assert re.fullmatch(rf"pydemap: {named}\S* is not installed: pip install 'pydemap\[cli\]'\n", done.stderr)
    assert listing(work) == []


def test_the_commands_need_neither_sigmf_nor_matplotlib(work):
    recording.write_sigmf("y", noisy(pydemap.square_qam(16)))
    arguments = ["llr", "y", "out.npy", "--order", "16", "--n0", "1"]
    code = WITHOUT.format(missing=["sigmf", "matplotlib"], arguments=arguments)
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
    assert np.load("out.npy").shape == (N, 4)


def test_version_and_help(capsys):
    assert run("--version") == 0
    assert pydemap.__version__ in capsys.readouterr().out
    for command in ("--help", "llr --help", "show --help", "demo --help"):
        assert run(command) == 0
        assert "Usage: pydemap" in capsys.readouterr().out


def test_help_states_gains_and_the_extent_of_an_estimate(capsys):
    assert run("llr --help") == 0
    text = " ".join(capsys.readouterr().out.split())
    assert "or real: .npy, .csv (one number a line), raw .f32 or .f64." in text
    assert f"from the first {BLOCK} symbols, of which max(1024, 2^22 / M) are evenly picked, or all" in text


# ---- show


@pytest.mark.parametrize(
    ("options", "facts"),
    [
        # Peak to mean 3 (sqrt M - 1)/(sqrt M + 1), neighbours 4 (1 - 1/sqrt M): computed (exact fractions).
        (
            "--order 64",
            {
                "order M": "64",
                "bits a symbol n": "6",
                "mean energy Es": "1",
                "minimum distance": "0.3086067",
                "half-spacing a": "0.15430335",
                "peak to mean energy": "2.33333333, 3.6798 dB",
                "neighbours at minimum distance": "3.5 on average",
                "Gray penalty": "1 bits from neighbour to neighbour",
                "kernel family": "fold",
                "boxes": "1",
            },
        ),
        # Gray penalty 7/6: J. G. Smith, IEEE Trans. Commun. COM-23, 1975 (from memory); the rest computed.
        (
            "--order 32",
            {
                "minimum distance": "0.447213595",
                "peak to mean energy": "1.7, 2.3045 dB",
                "neighbours at minimum distance": "3.25 on average",
                "Gray penalty": "1.16666667 bits from neighbour to neighbour",
                "kernel family": "boxes",
                "boxes": "2",
            },
        ),
        ("--points psk.csv", {"order M": "8", "kernel family": "points", "boxes": "none"}),
    ],
)
def test_show_prints_facts(work, capsys, options, facts):
    points = np.exp(2j * np.pi * np.arange(8) / 8)
    lines = [f"{point.real!r},{point.imag!r},{label}\n" for label, point in enumerate(points.tolist())]
    (work / "psk.csv").write_text("".join(lines))
    assert run(f"show {options}") == 0
    output = capsys.readouterr()
    printed = dict(re.split(r"\s{2,}", line.strip(), maxsplit=1) for line in output.out.splitlines())
    assert {name: printed[name] for name in facts} == facts
    assert output.err == ""
    assert listing(work) == ["psk.csv"]


def test_show_draws(work, capsys):
    assert run("show --order 32 --picture cross.png --bit 2") == 0
    assert "cross.png" in capsys.readouterr().out
    assert (work / "cross.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


# ---- demo


def test_demo(work, capsys):
    assert run(["demo", "--directory", "hop", "--seed", "7"]) == 0
    printed = capsys.readouterr().out
    assert listing(work / "hop") == [
        "burst-bits.npy",
        "burst-gain.npy",
        "burst-llr.npy",
        "burst-llr.npy.json",
        "burst.sigmf-data",
        "burst.sigmf-meta",
    ]
    metadata = json.loads((work / "hop" / "burst.sigmf-meta").read_text())
    sigmf.validate.validate(metadata)
    bits, h = np.load("hop/burst-bits.npy"), np.load("hop/burst-gain.npy")
    with recording.open_samples("hop/burst") as stream:
        y = stream.read(10**6)
    n0 = 10**-2.4
    assert f"N0 = {n0!r}" in metadata["global"]["core:description"]
    constellation = pydemap.cross_qam(128)
    llr = np.load("hop/burst-llr.npy")
    np.testing.assert_array_equal(llr, pydemap.SoftDemapper(constellation)(y, n0, gain=h))

    # The noise is of the power and the gain of the mean power that are claimed.
    noise = y - h * constellation.map(bits)
    assert np.mean(np.abs(noise) ** 2) == pytest.approx(n0, rel=0.02)
    assert np.mean(np.abs(h) ** 2) == pytest.approx(1, rel=0.2)

    errors = int(np.sum((llr < 0) != bits))
    wrong = np.where(bits, llr, -llr).astype(np.float64)
    information = 7 - np.mean(np.sum(np.log2(1 + np.exp(wrong)), axis=1))
    assert re.search(r"symbols +300000\s", printed)
    assert re.search(r"LLRs +2100000\s", printed)
    assert re.search(rf"hard-decision errors +{errors} bits, {errors / 2_100_000:.2e} of all", printed)
    assert re.search(rf"information carried +{information:.4f} of 7 bits a symbol", printed)
    assert re.search(r"time, file to file +\d+\.\d+ s", printed)
    assert 0.001 < errors / 2_100_000 < 0.02
    assert 6.5 < information < 7

    # The command it names makes the same file.
    (command,) = re.findall(r"^  pydemap (.*)$", printed, re.M)
    assert run(command.replace("burst-llr.npy", "again.npy")) == 0
    assert (work / "hop" / "again.npy").read_bytes() == (work / "hop" / "burst-llr.npy").read_bytes()


def test_demo_goes_to_a_temporary_directory_and_a_seed_repeats_it(work, capsys, monkeypatch):
    (work / "tmp").mkdir()
    monkeypatch.setenv("TMPDIR", str(work / "tmp"))
    monkeypatch.setattr("tempfile.tempdir", None)
    monkeypatch.setattr(scenario, "SYMBOLS", 5000)
    for _ in range(2):
        assert run("demo") == 0
    assert listing(work) == ["tmp"]
    first, second = (work / "tmp").iterdir()
    assert str(first) in capsys.readouterr().out
    for name in ("burst.sigmf-data", "burst-gain.npy", "burst-bits.npy", "burst-llr.npy"):
        assert (first / name).read_bytes() == (second / name).read_bytes()
    assert run("demo --directory other --seed 2") == 0
    assert (work / "other" / "burst.sigmf-data").read_bytes() != (first / "burst.sigmf-data").read_bytes()


@pytest.mark.parametrize(
    ("sigma", "carried"),
    # J(sigma) of a Gaussian LLR, mean sigma^2/2 and variance sigma^2: computed (two forms of the integral).
    [(0.5, 0.043729962944309), (1, 0.16074721979642), (2, 0.48594415413294), (4, 0.91282228577448)],
)
def test_the_information_carried_by_gaussian_llrs(sigma, carried):
    """Each bit at all quantiles of the LLR, so that the mean is an integral."""
    llr = sigma**2 / 2 + sigma * ndtri((np.arange(200_000) + 0.5) / 200_000)
    bits = np.repeat(np.array([0, 1], np.uint8), 200_000)[:, None] ^ np.array([0, 1], np.uint8)
    result = scenario.score(bits, np.where(bits == 0, np.tile(llr, 2)[:, None], -np.tile(llr, 2)[:, None]))
    assert result.information == pytest.approx(2 * carried, abs=1e-5)
    assert result.errors == 4 * np.count_nonzero(llr < 0)
    assert (result.llrs, result.bits_per_symbol) == (800_000, 2)


# ---- memory


# Not ru_maxrss: Linux hands on to a new program the peak of the process that started it, here pytest's.
MEASURED = """
import re, sys
from pydemap.cli import main
status = main(sys.argv[1:])
print(re.search(r"VmHWM:\\s+(\\d+) kB", open("/proc/self/status").read())[1])
sys.exit(status)
"""


def peak_megabytes(arguments):
    """Run a command in a process of its own; its peak resident memory in 10^6 bytes."""
    done = subprocess.run(
        [sys.executable, "-c", MEASURED, *arguments], stdout=subprocess.PIPE, text=True, check=True
    )
    return int(done.stdout.splitlines()[-1]) * 1024 / 1e6


def write_repeated(path, block, times):
    with open(path, "wb") as file:
        for _ in range(times):
            file.write(block)


def test_memory_does_not_grow_with_the_recording(work):
    block = noisy(pydemap.square_qam(4), BLOCK).tobytes()
    write_repeated("short.cf32_le", block, 2)
    write_repeated("long.cf32_le", block, 64)  # 134 MB
    options = ["--order", "4", "--n0", "0.1", "--output", "8:0.25"]
    short = peak_megabytes(["llr", "short.cf32_le", "short.raw", *options])
    long = peak_megabytes(["llr", "long.cf32_le", "long.raw", *options])
    assert (work / "long.raw").stat().st_size == 64 * 2 * BLOCK
    assert long < short + 20


@pytest.mark.slow
def test_a_recording_of_2_gib_in_300_mb(work):
    """Every block of the result is also compared with the library's."""
    y = noisy(pydemap.square_qam(16), BLOCK)
    write_repeated("long.cf32_le", y.tobytes(), 1024)
    assert (work / "long.cf32_le").stat().st_size == 2 << 30
    options = ["--order", "16", "--n0", "0.1", "--output", "6:0.5", "--threads", "2"]
    try:
        peak = peak_megabytes(["llr", "long.cf32_le", "out.raw", *options])
        print(f"peak resident memory {peak:.0f} MB")
        assert peak < 300
        word = pydemap.Word(6, 0.5)
        expected = pydemap.SoftDemapper(pydemap.square_qam(16), output=word)(y, 0.1).tobytes()
        with open("out.raw", "rb") as file:
            for _ in range(1024):
                assert file.read(len(expected)) == expected
            assert file.read() == b""
    finally:
        (work / "long.cf32_le").unlink()
        (work / "out.raw").unlink(missing_ok=True)
