"""From a region's spectrum and pixels to reciprocal vectors with their covariance."""
