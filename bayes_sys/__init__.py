"""bayes-sys: joint regressions for several units with short series and shared shocks."""
