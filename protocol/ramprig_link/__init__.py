"""The line protocol between ramprig and a board: a codec without I/O, standard library only."""
