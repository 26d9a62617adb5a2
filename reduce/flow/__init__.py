"""What the truth did: its fields, spectra, fluxes, budgets and transports."""
