"""Trials: the stages again with other inputs, to see what the conclusion hangs on."""
