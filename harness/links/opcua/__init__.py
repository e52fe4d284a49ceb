"""OPC UA: the rig as a server, and the client that a soft PLC uses."""
