"""Planning, drawing and topping up a probability sample."""
