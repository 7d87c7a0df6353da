"""Chance: addresses become words, uniforms and shocks, with the same bits on every machine.

The way of a number:

- `streams`: words and uniforms of an address (Philox). `laws`: shocks of a law from uniforms, a file a family.
- `draws`: values of drawn parameters. `student_copula`: shocks that are tied beyond the correlation of their normals.

What they are made of, operations that every processor rounds alike:

- `portable`: all of it under one name. `elementary`: exp, log, sine. `normal`, `gamma`: the functions of these laws.
  `matrices`: small ones, in a fixed order. `blocks`: long arrays worked on in short pieces.
- Quantiles of laws whose density alone is known: `inversion`, with `areas` under it, `tabulated` where it is dear.
- Whole numbers: `counting` where means move, `tables` of laws that stay, `thinnings` of many paths side by side.
- `jumps`: the law of a sum of jumps, for theory and checks; no value comes from it.

Compiled, to the same bits:

- `kernel`: recursions written once, run as they stand or compiled; `abreast` puts all paths of a step side by side.
- `machine`: compiled functions kept as machine code; `passing` and `compiled_passing`: how arguments reach it.
- `filters`, with `compiled_filter`: recursions of many coefficients, in strips of paths.
- `compiled`, `compiled_normal`, `compiled_elementary`, `compiled_inversion`, `compiled_counts`: the files of those
  names once more, for the compiler; imported only where there is no machine code yet.
"""
