"""What is this state? Solution to order parameters and a label with its evidence."""
