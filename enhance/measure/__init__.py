"""Figures: PSNR, SSIM, sharpness, and the plain alternatives they are compared with."""
