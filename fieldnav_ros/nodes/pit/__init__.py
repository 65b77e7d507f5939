"""The terminal beside the floor: ``fieldnav pit``."""
