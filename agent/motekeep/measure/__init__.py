"""Observations to intervals to readings; pure."""
