"""Hold the recipes and bench files that ship with the program, as data."""
