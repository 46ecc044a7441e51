"""From a netlist to equations: exact response, impedances, DC point, state space."""
