"""The instrument: a tracer as scripts see it, and the traces that it gives."""
