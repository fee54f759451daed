"""The spread chain, turnover and recording fits, snapshot banks.

Layer rule: may import ``graph``, ``statistics`` and ``references``; knows nothing of inference.
"""
