"""One command per module; each offers a click command called ``command``."""
