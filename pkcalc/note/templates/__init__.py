"""Templates of the printed note."""
