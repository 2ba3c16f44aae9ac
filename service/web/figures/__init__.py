"""Figures of a job, drawn from its result and its dataset. Only `draw` needs matplotlib, and only when one is drawn."""
