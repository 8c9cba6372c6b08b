"""Published equations of state, one a file: coefficients as data, source, range, accuracy."""
