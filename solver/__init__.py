"""Truth runs of simplified oceans."""
