"""Statistics of the choice: arrays in, frozen dataclasses out.

Knows no HTTP, no database, no settings and no clock.
"""
