"""What every room stands on: errors, constants, citations, tracers, units, seeds, progress."""
