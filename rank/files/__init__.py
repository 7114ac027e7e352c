"""Tables and files for people and programs."""
