"""Figures: PSNR, SSIM, sharpness, and the plain alternatives they are compared with."""

from enhance.measure.alternatives import alternatives
from enhance.measure.edge import edge_sfr, mtf50, rise_10_90
from enhance.measure.fidelity import psnr, ssim
from enhance.measure.heldout import Figure, exposure_times, re_expose, row_shares, summarise
from enhance.measure.moving import moving_mask, support_filter
from enhance.measure.noise import ceiling, noise_sigma
from enhance.measure.rank import rank_correlation
from enhance.measure.sharpness import sharpness

__all__ = [
    "Figure",
    "alternatives",
    "ceiling",
    "edge_sfr",
    "exposure_times",
    "moving_mask",
    "mtf50",
    "noise_sigma",
    "psnr",
    "rank_correlation",
    "re_expose",
    "row_shares",
    "rise_10_90",
    "sharpness",
    "ssim",
    "summarise",
    "support_filter",
]
