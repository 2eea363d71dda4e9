"""The distance of a plan from the best one with any rotations."""
