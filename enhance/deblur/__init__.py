"""The event double integral, for one frame or many."""
