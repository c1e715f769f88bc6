"""NumPyro models a user can read, and the priors they rest on."""
