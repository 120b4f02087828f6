"""Solving for the bias: elimination of the linear part, Newton, continuation, several points, refusals."""
