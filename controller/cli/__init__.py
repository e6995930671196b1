"""The composition root: arguments, signals, wiring. Only here may the simulator be imported."""
