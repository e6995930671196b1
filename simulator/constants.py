"""CODATA 2022 constants as the simulator uses them, SI. Written a second time in the controller."""

E_CHARGE = 1.602176634e-19  # C, exact
U_KG = 1.66053906892e-27  # kg
M_E_U = 0.0005485799090441  # u
C_LIGHT = 2.99792458e8  # m/s, exact
K_B = 1.380649e-23  # J/K, exact
EV_PER_KELVIN = K_B / E_CHARGE
