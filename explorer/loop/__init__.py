"""Loop: a study at given parameter values, gains and periods in, characteristic polynomials and poles out."""
