"""The null distribution of additive score statistics, one engine for all of them.

Each subject contributes one score vector out of a table of equally likely ones; the statistic is a
quadratic or a linear form of their sum. The rooms, in the order the data pass through them::

    tables         one subject's arrangements: a permuted row, a row and its mirror image, any list
    forms          what is computed from the sum: |L s|^2, or c . s with a tail
    symmetry       which occasions may be relabelled, and folding a table by them
    sorted_sums    exact, whole-number scores: keep the distinct sums, add a subject at a time
    two_halves     exact, real scores, quadratic: list two halves, count pairs on two trees
    sorted_halves  exact, real scores, linear: list two halves, count pairs by bisection
    monte_carlo    draws beyond the work budget, with a Clopper-Pearson interval
    results        Tail and Law, what comes out
    problem        tables and form together, with what is derived from both
    work           what an exact answer would cost, and which way is cheapest
    far_tails      the way to a tail that Monte Carlo cannot reach, by one of the next three
    corner         exact, the few arrangements at the end of the support
    importance     draws from tilted tables, weighed: interval and effective sample size
    saddlepoint    linear forms: an approximation without draws, many at once
    tilting        exponential tilts of tables and their cumulants, for these two
    orbit_means    the density of a tilted draw, whichever way its occasions are relabelled
    engine         the front door: tail, law, draws, smallest_tail
    shared         the same random rearrangements for many tests of one data set
    joint          one permutation test of many statistics together

Apart from these, with the same tables, draws and results, stands the one statistic that is neither
form::

    studentized    a sum divided by its own spread: exact by every pair of half sums
"""
