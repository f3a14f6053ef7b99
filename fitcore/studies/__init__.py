"""Questions asked of a finished fit: calibration, indirect values, error budget, outlook."""
