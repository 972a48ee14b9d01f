"""Forward models: parameters and a wavelength grid to heights and depths."""
