"""An input file as the runner hands it to a stage: its configured path and its bytes."""

from __future__ import annotations

from dataclasses import dataclass

import pyarrow as pa


@dataclass(frozen=True)
class InputFile:
    """`path` is the text of the configuration, which is what messages name; `data` may be memory-mapped."""

    path: str
    data: pa.Buffer

    @staticmethod
    def from_bytes(path: str, data: bytes) -> InputFile:
        return InputFile(path, pa.py_buffer(data))
