"""What recordings tell of the array they were made with: levels and faults of channels, clocks, order, calibration."""
