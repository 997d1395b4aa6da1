"""Open a clip: its metadata, and its frames as (time, luma plane) without colour conversion."""
