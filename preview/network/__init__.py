"""From a netlist to equations: exact response, impedances, noise, DC point, state space."""
