"""The workshop: what is done to a tracer before its curves count."""
