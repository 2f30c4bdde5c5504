"""Advice that is blind to the occasions: it chooses a test and keeps the test's level."""

from robustrm.advice.advising import Advice, Diagnostics, advise, diagnose
from robustrm.advice.blind import BlindFigures
from robustrm.advice.describe import Description

__all__ = ["Advice", "BlindFigures", "Description", "Diagnostics", "advise", "diagnose"]
