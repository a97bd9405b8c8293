"""What the joint estimate says of the measurements: whether they tell one story."""
