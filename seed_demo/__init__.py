"""An invented fleet with a story for each vehicle, and a simulator that shares no formula with the numerics."""
