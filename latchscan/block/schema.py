"""JSON Schema of block files, for editors that check and complete YAML as one types."""

from __future__ import annotations

from typing import Any

from latchscan.block.model import BlockFile
from latchscan.technology.schema import model_schema


def block_schema() -> dict[str, Any]:
    """JSON Schema (2020-12) of a block file.

    Notes
    -----
    It holds keys, types and ranges.  Voltages the wrong way round and names that do not agree
    are beyond a schema; `latchscan.block.check.check_block` finds those.
    """
    return model_schema(BlockFile, "latchscan block")
