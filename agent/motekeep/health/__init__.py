"""One small class a check; opens and closes findings; pure."""
