"""What people and programs read: text, JSON, pages and pictures.

- On a terminal: `text` (a verdict), `theory` with `equations`, `symbols` and `correlogram`, `difference`, `rendered`;
  `letters` for terminals that cannot show them all.
- Pages: `html`. `pictures`: charts as data, and charts as SVG or PNG.
- Of the language itself, made from the declarations: `catalogue`, `reference` (specs/README.md), `schema`.
"""
