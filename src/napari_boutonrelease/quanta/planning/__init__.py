"""How many trials a wanted precision takes."""
