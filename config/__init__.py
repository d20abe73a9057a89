"""The lowest floor: the stand file, its schema, units, places, errors. Imports nothing of ours."""
