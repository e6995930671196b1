"""CODATA 2022 constants as the controller uses them, SI. Written a second time in the simulator."""

ELEMENTARY_CHARGE = 1.602176634e-19  # C, exact
ATOMIC_MASS = 1.66053906892e-27  # kg
ELECTRON_MASS_U = 5.485799090441e-4  # u
LIGHT_SPEED = 299792458.0  # m/s, exact
BOLTZMANN = 1.380649e-23  # J/K, exact
