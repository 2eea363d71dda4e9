"""The search for rotations, with coefficients and shares, at a given number of circuits."""
