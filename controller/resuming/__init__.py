"""Going on with a run that broke off: the dose in doubt, the devices, the simulated bench brought back."""
