"""Level and power of tests, and coverage of intervals, on simulated data sets.

The rooms, in the order the data pass through them::

    p_values        p values of a list of tests on data sets (B, n, k), and on a design
    families        adjusted p values of all pairs: closed permutation testing, Holm
    level           the three level tables, their limits, and what each test is asked to hold
    location        level of the overall tests under equal trimmed means and unequal spread
    joint           level of the joint test of a specification grid
    batches         data sets of a block with their bootstrap resamples
    intervals       limits of every kind of interval on a batch
    truths          what the intervals are to cover, by quadrature
    coverage        coverage and width of every kind of interval
    evidence, location_page, coverage_page, joint_page
                    the tables as CSV and as pages; tabulating has what they share
    __main__        ``python -m robustrm.trials level``, ``location``, ``coverage``, ``grid``
"""
