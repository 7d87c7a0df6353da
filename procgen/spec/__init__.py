"""From a YAML file to a checked Spec, or to every fault of it with its place.

- Text: `file`, `yaml12` and `tree`, which keep places. `tables` and `pages`: files beside a spec, read with care.
- What may be written: `declare` and `domains` say what parameters are; `named`, `columns`, `sample`, `draws`, `units`,
  `local` and `timelist` are domains of their own.
- `reader` reads, with `entries` (bodies), `timegrid`, `groups`, `parameters` and `varying` (numbers that vary), `links`
  (what names point to), `correlated`, `following`, `copulas` and `nearest` for its parts.
- `model` and `calendar` are what comes out; `zones` and `elapsed` are what the calendar knows.
- Two specs: `variants` and `places` put other values in, `meaning` says what differs.
- `words`: what faults share. `records`: dataclasses that cost little to declare, for all rooms.
"""
