"""What may be said after stopping: p-values, intervals and estimates that allow for the stopping rule."""
