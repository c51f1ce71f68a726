"""Puts this folder on the import path, so that the tests of every folder share `array_systems` and its like."""
