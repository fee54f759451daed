"""Fixtures of the catalogue tests."""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from small_catalogue import put, sound

__all__ = ["put", "sound"]
