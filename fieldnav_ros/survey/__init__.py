"""Survey: where a field traps, stalls or flips, found before a robot does. Pure numpy."""
