"""Economy: the fewest lines, arcs or vertices that stay within a chord error of a spline."""
