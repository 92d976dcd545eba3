"""Before the fit: continuum, peaks, energy scale and resolution from the counts themselves."""
