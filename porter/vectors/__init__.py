"""Test vectors: what to press, what must come out, and what a port that passes is sure to do."""

from porter.vectors.build import build_vectors
from porter.vectors.files import read_csv, read_json, write_csv, write_json, write_vcd
from porter.vectors.model import Case, Suite
from porter.vectors.mutants import Score, mutants, score, sharpen

__all__ = [
    "Case",
    "Score",
    "Suite",
    "build_vectors",
    "mutants",
    "read_csv",
    "read_json",
    "score",
    "sharpen",
    "write_csv",
    "write_json",
    "write_vcd",
]
