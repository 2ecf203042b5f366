"""From a run's record to its figures, their uncertainties and its verdict."""
