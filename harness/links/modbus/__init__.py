"""Modbus TCP: the rig as a server, and the client by which the soft PLC reaches it."""
