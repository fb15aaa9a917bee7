"""Local feedback gains for large networks of coupled machines, with proof."""
