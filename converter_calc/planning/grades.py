"""Grades, the converter aims derived from them, and tramp limits: the names to import."""

from converter_calc.planning.tramp import (
    TrampCheck,
    largest_fitting_share,
    tell_tramp,
    worst_element,
)
from converter_calc.tapping.additions import Addition, additions
from converter_calc.tapping.aims import ConverterAim, Term, converter_aim, ladle_targets
from converter_calc.tapping.grade_library import Grade, Limit, grade, grades, parse_user_grade
from converter_calc.tapping.tap_practice import TapPractice, tap_practice

__all__ = [
    "Addition",
    "ConverterAim",
    "Grade",
    "Limit",
    "TapPractice",
    "Term",
    "TrampCheck",
    "additions",
    "converter_aim",
    "grade",
    "grades",
    "ladle_targets",
    "largest_fitting_share",
    "parse_user_grade",
    "tap_practice",
    "tell_tramp",
    "worst_element",
]
