"""How near the estimator comes to what is possible: known truth by the thousand, judged against the Cramer-Rao bound.

python -m tests.bench [FAMILY ...] [--seed 1 2 3] [--count N] [--jobs 2] [--json FILE] [--worst K]
"""
