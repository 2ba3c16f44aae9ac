"""Figures: what is drawn, mapped back to data; words; how they are kept and served."""
