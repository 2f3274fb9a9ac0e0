"""Which bilinears, one-body couplings and quadratic form? Material to MeanFieldModel."""
