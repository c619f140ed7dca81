"""State levels, edges, delays and widths of one capture or many."""
