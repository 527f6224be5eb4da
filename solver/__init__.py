"""Fields of the unit cell: plain arrays in, plain arrays out. Knows no file and no screen."""
