"""Models of measurements, with their derivatives by parameters, for fitting by least squares."""
