"""The schema's history: linear, numbered revisions of one idea each, every constraint named."""
