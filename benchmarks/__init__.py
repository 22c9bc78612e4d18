"""Speed, accuracy and calibration, measured in one run each; see `README.md`."""
