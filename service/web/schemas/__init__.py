"""What goes over the wire. Requests are strict: unknown keys, numbers as strings and NaN are refused."""
