"""Trials: the stages again with other inputs. What the conclusion hangs on, and whether it holds."""
