"""A second, slow and simple calculation of what the program computes; it shares no code with it."""
