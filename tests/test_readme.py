"""README.md says what is so: every example is run, in order, and every promise is the tests' own."""

import doctest
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from accuracy import BOUNDS

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text("utf-8")
BLOCKS = re.findall(r"^```(\w*)\n(.*?)^```$", README, re.M | re.S)


def run_python(text, names):
    """A block of >>> lines: whatever differs from what stands there is the error."""
    test = doctest.DocTest(doctest.DocTestParser().get_examples(text), names, "README.md", None, None, text)
    report = []
    runner = doctest.DocTestRunner(optionflags=doctest.ELLIPSIS)
    failed, tried = runner.run(test, out=report.append, clear_globs=False)
    names.update(test.globs)
    assert tried and not failed, "".join(report)


def run_console(text):
    """A block of $ lines, each with all that it prints; ... stands for any text."""
    environment = {**os.environ, "PATH": f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"}
    commands = re.findall(r"^\$ (.*)\n((?:(?!\$ ).*\n)*)", text, re.M)
    assert commands
    for command, expected in commands:
        done = subprocess.run(
            ["sh", "-c", command],
            env=environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            check=False,
        )
        assert done.returncode == 0, done.stdout
        same = doctest.OutputChecker().check_output(expected, done.stdout, doctest.ELLIPSIS)
        assert same, f"{command}\nprinted\n{done.stdout}\nnot\n{expected}"


def test_examples(tmp_path, monkeypatch):
    """From top to bottom, in one session and one directory, as a reader would."""
    monkeypatch.chdir(tmp_path)
    names = {}
    kinds = [kind for kind, _ in BLOCKS]
    assert kinds.count("python") > 8 and kinds.count("console") >= 3
    for kind, text in BLOCKS:
        if kind == "python":
            run_python(text, names)
        elif kind == "console":
            run_console(text)


def test_a_wrong_example_is_noticed(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    run_python(">>> 1 + 1\n2\n", {})
    run_console("$ echo one\none\n$ echo two three\ntwo ...\n")
    for wrong in (">>> 1 + 1\n3\n", ">>> 1 / 0\n", ">>> 1 + 1\n"):
        with pytest.raises(AssertionError):
            run_python(wrong, {})
    for wrong in ("$ echo one\ntwo\n", "$ false\n", "$ echo one\n", "one\n"):
        with pytest.raises(AssertionError):
            run_console(wrong)


def test_set_up_is_one_line_each():
    """What a fresh machine is set up with: the job first, then the tests, each in a block of its own."""
    lines = [text for kind, text in BLOCKS if kind == "sh"]
    job, tests = lines
    for line in lines:
        assert re.fullmatch(r"python3 -m venv (\.venv-\w+) && (\1/bin/\S+ [^&\n]*( && )?){2}\n", line)
    assert job.endswith("/bin/pydemap demo\n") and tests.endswith("/bin/python -m pytest -n 2\n")
    assert README.index("\nRun the main job") < README.index(job) < README.index("\nRun the tests")
    assert README.index("\nRun the tests") < README.index(tests)


def test_promised_accuracy_is_what_the_tests_hold():
    rows = re.findall(r"^\| (\S+) \| (\S+) \| (float\d+) \| (\S+) \| (\S+) \| .+ \|$", README, re.M)
    assert {(family, rule, real): float(bound) for family, rule, real, bound, _ in rows} == BOUNDS
    assert len(rows) == len(BOUNDS)
    assert all(float(found) <= float(bound) for *_, bound, found in rows)


def test_c_lines_are_the_examples():
    """Each stands in the example that the tests compile and run."""
    (fragment,) = (text for kind, text in BLOCKS if kind == "c")
    example = (ROOT / "csrc" / "tests" / "example.c").read_text("utf-8").splitlines()
    assert [line for line in fragment.splitlines() if line not in example] == []


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md", "csrc/README.md"])
def test_links_lead_somewhere(name):
    text = (ROOT / name).read_text("utf-8")
    links = re.findall(r"\]\(([^)#:]+)\)", text)
    assert [link for link in links if not (ROOT / name).parent.joinpath(link).exists()] == []


def test_developers_map_names_every_file():
    """The map in DEVELOPERS.md is complete, and names nothing that is not there."""
    guide = (ROOT / "DEVELOPERS.md").read_text("utf-8")
    for folder, pattern in (("pydemap", "*.py"), ("csrc/src", "*.[ch]"), ("tests", "*.py")):
        for path in (ROOT / folder).glob(pattern):
            if not path.name.startswith("__"):
                assert re.search(rf"`(\S*/)?{re.escape(path.name)}`", guide), f"{folder}/{path.name}"
    for named in re.findall(r"`((?:pydemap|csrc|tests|bench)/[\w./-]+)`", guide):
        assert (ROOT / named).exists(), named
