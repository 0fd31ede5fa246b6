"""Problem -> Solution: robust optimisation and decisions about rows and associations."""
