"""One bouton in several conditions: joint fits, variance against mean, 1/CV²."""
