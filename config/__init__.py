"""Settings and control plan: models and commented examples."""
