"""Slow, readable oracles: the same sums as the fast code, written as they are said aloud."""

from __future__ import annotations
