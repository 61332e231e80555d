"""Arrays become a value with its standard uncertainty; opens no file."""
