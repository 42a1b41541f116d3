"""Deviation maps: what is drawn of a comparison, as DXF and as a table; the page draws the same."""
