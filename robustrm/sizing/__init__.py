"""How many subjects: smallest attainable p, expected width of intervals, power.

The rooms, in the order a question passes through them::

    study           what is assumed: variation, expected ratios, limit, drop-out, planned tests
    pilot           the variation of a marker, estimated from a pilot
    rejections      p values of the planned tests on many simulated data sets
    simulating      one block of data sets: which tests reject, how wide the intervals are
    result          Sizing: tables, the smallest n, how they are printed
    wording         the sentence for a protocol, the cautions
    asking          sample_size
"""

from robustrm.sizing.asking import sample_size
from robustrm.sizing.pilot import PilotVariation, pilot_variation
from robustrm.sizing.result import Sizing

__all__ = ["PilotVariation", "Sizing", "pilot_variation", "sample_size"]
