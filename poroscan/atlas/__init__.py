"""The library of simulated particles and the match against it."""
