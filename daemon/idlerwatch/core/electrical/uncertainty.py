"""Quantiles by which a least-squares fit is believed or not."""

from typing import Final

CHI_SQUARE_999: Final = (10.83, 10.83, 13.82, 16.27, 18.47, 20.52, 22.46, 24.32, 26.12, 27.88, 29.59)
"""0.999 quantiles of chi-square, by degrees of freedom up to 10 (standard table); entry 0 serves distances that cannot
close a figure, which is an inequality with one spare."""
