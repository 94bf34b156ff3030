"""From a curve to end points, amounts and their uncertainties."""
