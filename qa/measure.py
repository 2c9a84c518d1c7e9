"""Run = series + plate + recipe -> readings."""
