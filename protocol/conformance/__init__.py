"""Checkers of the wire: of a device on any port, and of any host by a scripted device.

They know SPEC.md, the codec and a byte stream, and nothing of the host library, so that whoever
builds a firmware or a host of their own can run them from a checkout. See README.md.
"""
