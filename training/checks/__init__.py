"""Checks that say whether an estimator may be trusted: calibration, sharpness, closeness to exact draws."""
