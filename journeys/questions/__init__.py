"""What is asked of a fit: functions that return frozen results."""
