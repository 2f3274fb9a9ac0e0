"""What does a person look at? Figures from stored results."""
