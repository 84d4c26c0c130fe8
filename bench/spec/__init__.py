"""bench.toml: found, read, checked, and handed on in SI numbers."""

from bench.spec.load import FoundBench, find_bench, load_bench
from bench.spec.todrivers import for_drivers

__all__ = ["FoundBench", "find_bench", "for_drivers", "load_bench"]
