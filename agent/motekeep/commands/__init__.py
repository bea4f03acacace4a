"""What the commands do, one file a command; `cli.py` only parses their words."""
