"""What to do next: steps, what they cost from here, and what they would tell."""
