"""Scene, frame camera and event sensor: recordings whose truth is known."""
