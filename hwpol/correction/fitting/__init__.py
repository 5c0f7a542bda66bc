"""From standards to a calibration: least squares, bad standards and scatter, choice of terms."""
