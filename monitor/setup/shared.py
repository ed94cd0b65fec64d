"""The loop's blocks in a file that every process of the daemon can map: the desk reads what the loop writes.

No lock: every number is eight aligned bytes and is written whole; a reader may see two fields of different
ticks, which is good enough for metrics.
"""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

import numpy as np

from monitor.flow.layout import Block, Sizes, block_dtype, loop_fields, outputs_fields, state_fields


class Shared(NamedTuple):
    """The blocks that lie in the file."""

    state: Block
    outputs: Block
    loop: Block


def attach(path: Path, sizes: Sizes) -> Shared:
    """Map the file, creating it zeroed when it is not there."""
    fields = (state_fields(sizes), outputs_fields(sizes), loop_fields())
    dtypes = [block_dtype(names) for names in fields]
    length = sum(dtype.itemsize for dtype in dtypes)
    if not path.exists():
        path.write_bytes(bytes(length))
    memory = np.memmap(path, np.uint8, "r+", shape=(length,))
    parts, start = [], 0
    for dtype in dtypes:
        parts.append(np.asarray(memory[start : start + dtype.itemsize]).view(dtype))
        start += dtype.itemsize
    return Shared(*parts)
