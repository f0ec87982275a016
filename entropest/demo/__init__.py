"""An invented record, the script that made it, and a walk through the main job."""
