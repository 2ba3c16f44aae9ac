"""Warnings: one function per code, grouped by what they look at; levels chosen so that clean data stay quiet.

Some eight tests look at every dataset. Each may raise a caution at 1 % (0.5 % where two look at the
same thing) when nothing is wrong, so that at most one clean dataset in ten carries any caution.
"""
