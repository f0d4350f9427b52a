"""Where the posterior peaks: least squares, several minima, profiles."""
