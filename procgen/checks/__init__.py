"""The validator: does an ensemble have the exact behaviour that its spec states?

The way through it: `validate` takes the data (`source`) and the spec; `planning` makes the plan of one pass; `lane`
goes through the values and leaves sums (`gather`); `judgement` makes checks of these; `verdict` weighs them together.

- Data. Ensembles of ours: `parts` (one task a range of paths), `rectangles`, `parameters`. Anyone's tables:
  `foreign`, `files`, `roles` (which column is what), `reshaped`, `clock`, `late` (beginning later), `sizes`.
- Plan. Where theory and data are compared: `probes`, `pools` (averages along paths), `relations` (combinations of
  series). What is known of the values: `atoms`, `smooth`, `support`, `rounding`, `missing`. How shocks are recovered:
  `recover`, `undo` (numbers by path), `kalman` and `small` (sums), `few` (few values), `short` (few steps), `spans`
  (long paths, cut).
- Sums. Their order, which no cut into parts may change: `blocks`, `tree`. Of values: `sums`, `structure`, `grids`,
  `copies`, `prints`, `repeated`, `extremes`. Of shocks: `scores` and `uniforms`, `shocks`, `stretches`, `farthest`,
  `together`, `pairs`, `tied` and `untied`. Of what has no such shocks: `errors`, `squares`, `neighbours`, `log_sizes`,
  `slow`, `waves`, `special`, `led`. Over paths and their order: `apart`, `start`, `masks`, `ordered`.
- The same, compiled: `strips` and `fused` (wide tiles), `fused_few` (few paths), `crossed` (pairs), `stepped`,
  `beyond` (far values).
- Judging. `judge` makes findings, with `judge_moments`, `judge_pools` and `judge_shocks` for the tests of each kind;
  `limits`, `tails` and `saddle` give p-values, `power` the sizes that would be found.
- Telling. Which departures come first, and what only follows from them: `attribution`, `common`, `lifted`, `shape`,
  `copied`. Causes: `handled`, `filled`. What was judged: `coverage`. In words: `words`.

Beside it, `difference` compares two ensembles or specs, with `paired` and `held`.
"""
