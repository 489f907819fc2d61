"""Which star is which: matching, plate solution, comparison sequence."""
