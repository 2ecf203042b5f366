"""Fits of measured curves: drop against current, heating against time, with honest budgets.

``least_squares`` is the general fit, ``drop`` and ``heating`` are the two curves of the bench.
"""
