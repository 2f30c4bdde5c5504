"""Level and power of tests on simulated data sets.

The rooms, in the order the data pass through them::

    p_values    p values of a list of tests on data sets (B, n, k), and on a design
    families    adjusted p values of all pairs: closed permutation testing, Holm
    level       the three level tables, their limits, and what each test is asked to hold
    evidence    the tables as CSV and as a page
    __main__    ``python -m robustrm.trials level``
"""
