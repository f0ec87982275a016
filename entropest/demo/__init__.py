"""An invented record, and the script that made it."""
