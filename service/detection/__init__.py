"""Policies, the detector bank, exact running values and learned baselines; pure."""
