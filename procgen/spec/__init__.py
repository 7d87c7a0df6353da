"""From a YAML file to a checked Spec, or to every fault of it with its place.

`declare` and `domains` say what parameters are; `tree` and `yaml12` keep places; `reader` reads, with `entries`,
`timegrid`, `links` and `correlated` for its parts; `model` and `calendar` are what comes out.
"""
