"""Which figures there are, what each is called on a page, and the version of the code that draws them."""

from typing import Literal

FigureName = Literal["curve", "degrees", "residuals", "normal", "spread", "leverage", "unseen"]
FigureFormat = Literal["svg", "png"]

TITLES: dict[FigureName, str] = {
    "curve": "Chosen curve",
    "degrees": "Error by degree",
    "residuals": "Residuals",
    "normal": "Normal quantiles",
    "spread": "Spread",
    "leverage": "Leverage",
    "unseen": "Unseen bend",
}
MEDIA_TYPES: dict[FigureFormat, str] = {"svg": "image/svg+xml", "png": "image/png"}

VERSION = 2
"""Kept figures of another version are drawn anew: raise it whenever a figure would look different."""
