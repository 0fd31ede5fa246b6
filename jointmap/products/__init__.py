"""The reference as arrays and tables: assembled, written, read back, shown."""
