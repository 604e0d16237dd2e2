"""Modbus/TCP; the only room that imports pymodbus."""
