"""Records, randomness and argument checks; knows no method."""
