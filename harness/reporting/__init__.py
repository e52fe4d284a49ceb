"""What people see of a run: the terminal, the report, and the results for a build server."""
