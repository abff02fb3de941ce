"""What is packed and built: the header, the example, the extension, what an install brings along."""

import importlib.metadata
import re
import shlex
import subprocess
import sys
import sysconfig
from pathlib import Path

import pytest

import pydemap
from pydemap import _pydemap

CSRC = Path(__file__).resolve().parents[1] / "csrc"
HEADER = (CSRC / "include" / "pydemap.h").read_text("utf-8")
README = (CSRC / "README.md").read_text("utf-8")


def fences(text, language):
    return re.findall(rf"^```{language}\n(.*?)^```$", text, re.M | re.S)


@pytest.fixture(scope="module")
def compiler():
    return shlex.split(sysconfig.get_config_var("CC") or "cc")[:1]


def test_readme_shows_the_example():
    assert (CSRC / "tests" / "example.c").read_text("utf-8") in fences(README, "c")


def test_readme_shows_what_the_example_prints(tmp_path, compiler):
    """Compiled from the sources that an embedder finds through get_include(), as the README says."""
    include = Path(pydemap.get_include())
    sources = sorted(map(str, (include.parent / "src").glob("*.c")))
    example = tmp_path / "example.c"
    (example_text,) = (text for text in fences(README, "c") if "int main" in text)
    example.write_text(example_text)
    flags = ["-std=c99", "-O1", "-ffp-contract=off", "-Wall", "-Wextra", "-Werror"]
    subprocess.run(
        [*compiler, *flags, f"-I{include}", example, *sources, "-o", tmp_path / "example"], check=True
    )
    printed = subprocess.run([tmp_path / "example"], check=True, capture_output=True, text=True).stdout
    assert printed in fences(README, "text")


def test_get_include_names_the_public_header():
    include = Path(pydemap.get_include())
    assert (include / "pydemap.h").read_text("utf-8") == HEADER
    assert {p.name for p in (include.parent / "src").iterdir()} == {p.name for p in (CSRC / "src").iterdir()}


def test_one_version():
    (version,) = re.findall(r'^#define PYDEMAP_VERSION "(.*)"$', HEADER, re.M)
    assert _pydemap.ffi.string(_pydemap.lib.pdm_version()).decode() == version
    assert importlib.metadata.version("pydemap") == version == pydemap.__version__


def test_extension_declares_what_the_header_does():
    """The header's functions and constants, all and no others."""
    code = re.sub(r"/\*.*?\*/", "", HEADER, flags=re.S)
    functions = set(re.findall(r"\b(pdm_\w+)\(", code))
    constants = set(re.findall(r"^ +(PDM_\w+) = ", code, re.M))
    assert len(functions) > 15 and len(constants) > 15
    assert set(dir(_pydemap.lib)) == functions | constants


def test_declared_once():
    """No file but the header holds a prototype of a public function."""
    prototype = re.compile(
        r"^(?:extern )?[\w ]+[ *]pdm_(?:plan|demap|slice|use|available|isa|status|version)\w*\([^{]*?\);",
        re.M,
    )
    assert prototype.search(HEADER)
    files = [*CSRC.glob("src/*"), *CSRC.glob("*.py"), *CSRC.parent.glob("pydemap/*.py*")]
    assert [str(path) for path in files if path.is_file() and prototype.search(path.read_text("utf-8"))] == []


def test_plain_install_needs_numpy_and_cffi_alone():
    needed = importlib.metadata.requires("pydemap") or []
    plain = {re.split(r"[^\w-]", name)[0].lower() for name in needed if "extra ==" not in name}
    assert plain == {"numpy", "cffi"}


def test_import_brings_no_extra_in():
    """Nor SciPy, which only the tests use."""
    extras = ["click", "rich", "matplotlib", "sigmf", "scipy"]
    program = f"import sys, pydemap; print(*set(sys.modules) & set({extras}))"
    result = subprocess.run([sys.executable, "-c", program], check=True, capture_output=True, text=True)
    assert result.stdout.split() == []
