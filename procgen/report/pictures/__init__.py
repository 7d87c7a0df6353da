"""Pictures of a spec and of paths of it: what is stated beside what is seen, as a page, an SVG or a PNG."""
