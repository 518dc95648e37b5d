"""Array kernels: numpy arrays in, numpy arrays out, with no labels and no files."""
