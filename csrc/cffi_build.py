"""What the Python extension declares: the marked part of the public header, so nothing is declared twice.

Run by `python -m cffi.gen_src exec-python` from CMakeLists.txt.
"""

from pathlib import Path

from cffi import FFI

header = (Path(__file__).parent / "include" / "pydemap.h").read_text("utf-8")
ffibuilder = FFI()
ffibuilder.cdef(header.partition("/* cffi: begin */")[2].partition("/* cffi: end */")[0])
ffibuilder.set_source("pydemap._pydemap", '#include "pydemap.h"')
