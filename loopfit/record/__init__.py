"""From a file to a record: time, measurement, setpoint and output."""
