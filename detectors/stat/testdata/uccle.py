#!/usr/bin/env python3
"""Gumbel fit by L-moments to the yearly maxima of daily rain at Uccle, mm.

    python3 uccle.py

Prints mu, beta and the levels of 2, 10, 20, 50 and 100 years that
stat_test.go holds. L-moments by their definition, as means over all pairs
(Hosking 1990), not by the weighted sums of the Go code. Data: Sneyers 1977,
as in the R package evd (uccle$day), 1938-1972.
"""
from itertools import combinations
from math import log

MAXIMA = [33.8, 27.7, 60.0, 24.0, 72.3, 50.7, 18.7, 41.2, 26.6, 27.2, 23.8, 19.8, 34.3, 28.2, 51.1, 37.5, 34.3, 22.2,
          35.6, 34.2, 24.3, 20.3, 48.0, 32.4, 59.6, 60.4, 27.0, 45.8, 39.8, 21.6, 19.7, 54.4, 29.1, 41.6, 26.0]

pairs = [abs(a - b) / 2 for a, b in combinations(MAXIMA, 2)]
beta = sum(pairs) / len(pairs) / log(2)
mu = sum(MAXIMA) / len(MAXIMA) - 0.5772156649015329 * beta
print(f"mu {mu:.6f} beta {beta:.6f}")
for years in (2, 10, 20, 50, 100):
    print(f"{years} years: {mu - beta * log(-log(1 - 1 / years)):.4f}")
