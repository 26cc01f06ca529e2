"""Arrays in, arrays out: returns, volatility, value at risk, expected shortfall. Knows no files, clocks or settings.

Every function works on a matrix (subjects, scenarios), scenarios in time order, and answers for each subject alone:
what is wrong with one row never reaches another, and a row gives the same digits in any company. Profit is positive,
loss negative; value at risk and expected shortfall are positive when they are losses and are not floored at 0.

One module a method: `historical`, `normal`, `student`. None of these figures is the worst that can happen.
"""
