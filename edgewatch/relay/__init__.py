"""The process stop: serial control line, byte-frame boards, Modbus RTU coil."""
