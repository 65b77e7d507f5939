"""The built-in 2D simulator: plant, layouts, judge and the batched loop. Pure numpy."""
