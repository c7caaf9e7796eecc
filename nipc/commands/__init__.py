"""The commands, one a file, in the order in which they are used."""
