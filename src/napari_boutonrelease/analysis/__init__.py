"""One movie's choices, run, results and saved analysis."""
