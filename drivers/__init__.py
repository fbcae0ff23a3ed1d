"""Speak to a function generator and an oscilloscope over VISA; know nothing of recipes."""
