"""How much of an answer is the choice of tables: ingredients of a population swapped, and compared."""

from .compare import MARKS, MOST, Contrast, contrast
from .design import Design, Factor, design, served
from .ingredients import Ingredient, ingredients
from .swaps import read_swap, swapped
from .variance import Parts, decompose, decompose_sample

__all__ = [
    "MARKS",
    "MOST",
    "Contrast",
    "Design",
    "Factor",
    "Ingredient",
    "Parts",
    "contrast",
    "decompose",
    "decompose_sample",
    "design",
    "ingredients",
    "read_swap",
    "served",
    "swapped",
]
