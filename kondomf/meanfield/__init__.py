"""Which Gaussian states are stationary, and are they minima? MeanFieldModel to Solution."""
