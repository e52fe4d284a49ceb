"""The test harness around the simulated plant."""
