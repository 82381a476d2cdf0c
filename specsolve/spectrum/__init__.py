"""From a spectrum to equivalent widths: reading, velocity, continuum, fits of lines."""
