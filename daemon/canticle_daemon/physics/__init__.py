"""Pure vehicle dynamics: the road's frame, the car's loads, the tire, its wear."""
