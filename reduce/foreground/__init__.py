"""Foreground families: one short file each, all answering to `protocol.Family`."""
