"""Arrays in, arrays out: the numerical floor, which knows nothing of subjects, files or plans."""
