"""Broken case files: a sound case, one mistake, and what the error must say."""

from bad_case_geometry import MESHES, PLACES, SHAPES
from bad_case_layers import STACKS
from bad_case_ranges import RANGES
from bad_case_words import FILE, QUANTITIES, WORDS

BAD_CASES = [*FILE, *WORDS, *QUANTITIES, *RANGES, *PLACES, *SHAPES, *MESHES, *STACKS]
