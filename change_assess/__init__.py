"""Area of land change and map accuracy from a probability sample."""
