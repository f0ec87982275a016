"""The outcome law of a joint measurement: exact, in floating point, and by drawing."""
