"""The compiled module; its declarations are those of csrc/include/pydemap.h."""

from typing import Any

ffi: Any
lib: Any
