"""The campaign over the families of simulated flights: `python -m tests.montecarlo`."""
