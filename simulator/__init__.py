"""The simulated plant: forward physics, closed form between events. Imports nothing of ours."""
