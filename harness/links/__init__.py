"""Links to the outside: registers and codecs, Modbus, OPC UA."""
