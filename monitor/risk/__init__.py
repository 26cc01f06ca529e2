"""Arrays in, arrays out: returns, volatility, value at risk, expected shortfall. Knows no files, clocks or settings.

Every function works on a matrix (subjects, scenarios), scenarios in time order, and answers for each subject alone:
what is wrong with one row never reaches another, and a row gives the same digits in any company. Profit is positive,
loss negative; value at risk and expected shortfall are positive when they are losses and are not floored at 0.

    what a row is       figures, returns, moments
    value at risk, ES   historical (rolling), age_weighted, volatility_scaled, normal, student (student_fit),
                        cornish_fisher, peaks_over_threshold (pareto_fit), monte_carlo; methods by name
    volatility          volatility, garch (garch_fit), ranges
    probability         probability, tail_index
    how sure            bounds: order_bounds, delta_bounds, bootstrap
    of what made up     components (harrell_davis), leave_one_out
    how it has done     exceptions, coverage, shortfall_test, transform, goodness
    draws               randomness

None of these figures is the worst that can happen.
"""
