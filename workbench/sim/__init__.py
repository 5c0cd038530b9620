"""What the loop does: the controller and the plant in sampled time."""
