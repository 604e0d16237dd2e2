"""OPC UA; the only room that imports asyncua."""
