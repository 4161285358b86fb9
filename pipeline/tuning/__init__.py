"""From a model to settings: criteria, the tuner, and what the fit's uncertainty does to both."""
