"""Statistics of stationary time series, each with its standard error."""
