"""Families of specs for the study of false alarms: every kind of the catalogue and every law is in at least one.

A test holds that, so a new term must be added to a family here.
"""

from __future__ import annotations

import copy
from collections.abc import Iterator, Mapping
from typing import Any

_T = {"student_t": {"df": 6}}
_SAMPLE = [4.1, 0.3, 2.2, 7.5, 2.2, 1.8, 3.3, 0.9, 12.4, 5.0, 2.7, 1.1]
_REPEAT = {"after": "repeat"}
_RECORD = [3.1, 5.2, 4.7, 6.3, 2.8, 5.9, 7.4, 6.6, 4.2, 3.9, 5.5, 8.1, 6.4, 5.8, 4.6, 3.3, 2.1, 4.4]
_GARCH = {"sd": 1, "alpha": 0.1, "beta": 0.8}
_AR = [{"ar": {"phi": 0.6, "sd": 1}}]

FAMILIES: Mapping[str, Any] = {
    "white noise": [{"constant": 3}, {"white_noise": {"sd": 2}}],
    "walk": [{"random_walk": {"sd": 0.5, "drift": 0.01, "start": 10}}],
    "ar": [{"ar": {"phi": [0.7, -0.2], "sd": 1}}],
    "arma": [{"arma": {"phi": [0.5, 0.3], "theta": [0.4], "sd": 1}}],
    "ma": [{"ma": {"theta": [0.6, 0.3, 0.1], "sd": 1}}],
    "seasonal": [
        {"trend": {"level": 5, "slope": 0.01}},
        {"seasonal": {"period": 12, "harmonics": [{"amplitude": 3, "peak": 2}, {"amplitude": 1}]}},
        {"ar": {"phi": 0.4, "sd": 1}},
    ],
    "structural": [{"random_walk": {"sd": 0.2}}, {"ar": {"phi": 0.8, "sd": 1}}, {"white_noise": {"sd": 0.5}}],
    "rounded": {"series": {"x": {"decimals": 1, "of": [{"random_walk": {"sd": 0.5}}, {"ar": {"phi": 0.6, "sd": 1}}]}}},
    "student": [{"ar": {"phi": 0.5, "sd": 1, "law": _T}}],
    "laplace": [{"ma": {"theta": 0.4, "sd": 1, "law": "laplace"}}],
    "garch": [{"garch": {"omega": 0.05, "alpha": 0.1, "beta": 0.85}}],
    "arma-garch": [
        {"arma": {"phi": 0.5, "theta": 0.3, "shock": {"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8, "law": _T}}}}
    ],
    "lognormal": [{"exp": [{"ar": {"phi": 0.8, "total_sd": 0.3}}]}],
    "integrated": [{"integrate": [{"ar": {"phi": 0.5, "sd": 1}}]}],
    "differenced": [{"difference": {"of": [{"ar": {"phi": 0.5, "sd": 1}}]}}],
    "product": [{"product": [{"ar": {"phi": 0.5, "sd": 1}}, {"exp": [{"ar": {"phi": 0.7, "sd": 0.1}, "as": "size"}]}]}],
    "garch in noise": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}, {"ar": {"phi": 0.6, "sd": 1}}],
    "several": {
        "shared": {"w": [{"ar": {"phi": 0.8, "total_sd": 1}}]},
        "series": {
            "x": [{"use": "w", "times": 2}, {"white_noise": {"sd": 1}}],
            "y": [{"use": "w"}, {"random_walk": {"sd": 0.3}}],
            "z": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8}}],
        },
        "correlation": [{"between": ["x.white_noise", "z.garch"], "value": 0.5}],
    },
    "t copula": {
        "series": {
            "x": [{"ar": {"phi": 0.6, "sd": 1}}],
            "y": [{"white_noise": {"sd": 2, "law": _T}}],
            "z": [{"random_walk": {"sd": 0.3}}],
        },
        "correlation": [
            {
                "within": ["x.ar", "y.white_noise", "z.random_walk"],
                "value": 0.5,
                "copula": {"student_t": {"df": 4}},
            }
        ],
    },
    "calendar": {
        "time": {"start": "2027-01-04", "every": "1d", "zone": "Europe/Madrid"},
        "series": {
            "x": [
                {"annual": {"harmonics": [{"amplitude": 8, "peak": "07-20"}]}},
                {"calendar": {"by": "weekday", "values": [0, 0, 0, 0, -5, -20, -25]}},
                {"holidays": {"days": ["12-25", "05-01"], "size": -30, "day_before": -8}},
                {"ar": {"phi": 0.5, "sd": 2}},
            ],
            "y": [
                {"damped_trend": {"level": 50, "slope": 2, "damping": 0.95}},
                {"exponential_trend": {"level": 40, "rate": -0.02, "base": 10}},
                {"logistic_trend": {"capacity": 100, "rate": 0.15, "midpoint": 25}},
                {"event": {"shape": "ramp", "at": 10, "size": -15, "length": 5}},
                {"white_noise": {"sd": 1}},
            ],
        },
    },
    "state space": {
        "series": {
            "x": [{"local_level": {"level_sd": 0.4, "noise_sd": 1, "start": 1120}}],
            "y": [{"local_linear_trend": {"level_sd": 0.5, "slope_sd": 0.02, "noise_sd": 1, "start": 100}}],
            "z": [
                {"stochastic_cycle": {"rho": 0.9, "period": 20, "total_sd": 3}},
                {"seasonal_random_walk": {"period": 4, "sd": 0.3, "start": [5, -2, -4, 1]}},
            ],
            "o": [{"ornstein_uhlenbeck": {"rate": 0.1, "mean": 3, "sd": 0.2}}],
        }
    },
    "seasonal arima": [
        {"arima": {"d": 1, "theta": -0.4, "seasonal": {"period": 12, "d": 1, "theta": -0.3}, "sd": 0.04}}
    ],
    "stochastic volatility": [{"stochastic_volatility": {"sd": 1, "phi": 0.9, "eta": 0.2}}],
    "asymmetric volatility": {
        "series": {
            "x": [{"egarch": {"scale": 1, "alpha": 0.2, "gamma": -0.1, "beta": 0.9}}],
            "y": [{"gjr_garch": {"sd": 1.1, "alpha": 0.03, "gamma": 0.08, "beta": 0.87}}],
            "z": [{"arch": {"omega": 0.7, "alpha": 0.3}}],
        }
    },
    "correlation by state": {
        "shared": {"market": [{"chain": {"states": ["calm", "stress"], "durations": {"calm": 20, "stress": 8}}}]},
        "series": {"x": [{"ar": {"phi": 0.6, "sd": 1}}], "y": [{"white_noise": {"sd": 2, "law": "laplace"}}]},
        "correlation": [{"between": ["x.ar", "y.white_noise"], "by": "market", "value": {"calm": 0.2, "stress": 0.8}}],
    },
    "constant correlation": {
        "series": {
            "x": [{"garch": {"sd": 0.45, "alpha": 0.06, "beta": 0.85}}],
            "y": [{"garch": {"sd": 0.6, "alpha": 0.1, "beta": 0.8, "law": _T}}],
        },
        "correlation": [{"between": ["x.garch", "y.garch"], "value": 0.4}],
    },
    "switching garch": [
        {
            "switching_garch": {
                "omega": {"calm": 0.1, "storm": 1},
                "alpha": {"calm": 0.05, "storm": 0.3},
                "beta": {"calm": 0.4, "storm": 0.3},
                "durations": {"calm": 40, "storm": 8},
            }
        }
    ],
    "regimes": [
        {
            "regimes": {
                "branches": {
                    "calm": [{"ar": {"phi": 0.8, "sd": 1}}],
                    "storm": [{"constant": 3}, {"white_noise": {"sd": 4}}],
                },
                "durations": {"calm": 40, "storm": 8},
            }
        }
    ],
    "chains": {
        "shared": {"state": [{"chain": {"states": ["calm", "storm"], "durations": {"calm": 20, "storm": 8}}}]},
        "series": {
            "x": [{"use": "state"}],
            "y": [
                {
                    "regimes": {
                        "follow": {"use": "state"},
                        "branches": {"calm": [{"constant": 1, "as": "low"}], "storm": [{"constant": 5, "as": "high"}]},
                    }
                },
                {"white_noise": {"sd": 1}},
            ],
            "z": [{"flag": {"share": 0.2, "stay": 5}}],
            "n": [{"switching_noise": {"sd": {"calm": 1, "storm": 3}, "durations": {"calm": 40, "storm": 8}}}],
        },
    },
    "bounded": {
        "series": {
            "x": [{"ar": {"phi": 0.6, "sd": 1, "law": "uniform"}}],
            "y": {"type": "float32", "of": [{"white_noise": {"sd": 2, "law": "uniform"}}]},
        },
        "correlation": [{"between": ["x.ar", "y.white_noise"], "value": -0.4}],
    },
    "skewed": {
        "series": {
            "x": [{"ar": {"phi": 0.5, "sd": 1, "law": {"gamma": {"shape": 1.5}}}}],
            "y": [{"white_noise": {"sd": 1, "law": {"lognormal": {"sigma": 0.5}}}}],
            "z": [{"random_walk": {"sd": 1, "law": {"skewed_t": {"df": 8, "skew": 0.5}}}}],
        }
    },
    "skewed sums": [
        {"ar": {"phi": 0.8, "sd": 1, "law": {"gamma": {"shape": 1}}}},
        {"white_noise": {"sd": 0.5, "law": {"lognormal": {"sigma": 0.5}}}},
    ],
    "other laws": {
        "series": {
            "a": [{"ma": {"theta": -0.4, "sd": 1, "law": {"ged": {"shape": 1.3}}}}],
            "b": [{"ar": {"phi": 0.7, "sd": 1, "law": "logistic"}}],
            "c": [{"white_noise": {"sd": 1, "law": {"mixture": {"weight": 0.2, "ratio": 3}}}}],
        }
    },
    "costly laws": {
        "series": {
            "d": [{"ar": {"phi": 0.3, "sd": 1, "law": {"skew_normal": {"alpha": 4}}}}],
            "e": [
                {
                    "white_noise": {
                        "sd": 1,
                        "law": {
                            "normal_mixture": {
                                "components": [{"weight": 0.3, "mean": 1, "sd": 1}, {"weight": 0.7, "sd": 2}]
                            }
                        },
                    }
                }
            ],
        }
    },
    "few values": {
        "series": {
            "a": [{"white_noise": {"sd": 2, "law": {"bernoulli": {"p": 0.3}}}}],
            "b": [{"ar": {"phi": 0.5, "sd": 1, "law": {"bernoulli": {"p": 0.6}}}}],
            "c": [{"white_noise": {"sd": 1, "law": {"empirical": {"values": _SAMPLE}}}}],
            "d": [{"ma": {"theta": 0.4, "sd": 1, "law": {"empirical": {"values": _SAMPLE, "smoothed": True}}}}],
        }
    },
    "without a variance": {
        "series": {
            "a": [{"white_noise": {"spread": 2, "law": {"stable": {"alpha": 1.6, "beta": 0.7}}}}],
            "b": [{"ar": {"phi": 0.6, "shock": {"white_noise": {"spread": 1, "law": {"stable": {"alpha": 1.8}}}}}}],
        }
    },
    "bent": {
        "series": {
            "a": [{"abs": [*_AR, {"constant": 0.5}]}],
            "b": [{"clip": {"of": [{"ar": {"phi": 0.8, "total_sd": 2}}], "low": -1, "high": 3}}],
            "c": [{"hinge": {"of": [{"ar": {"phi": 0.6, "total_sd": 4}}, {"constant": 12}], "below": 15}}],
            "d": [{"max": {"of": _AR, "and": [{"white_noise": {"sd": 2}}]}}],
            "e": [{"min": {"of": _AR, "and": [{"constant": 0.8}]}}],
        }
    },
    "multiples": {
        "series": {
            "a": [{"round": {"of": [{"ar": {"phi": 0.6, "total_sd": 2}}], "to": 0.5}}],
            "b": [{"floor": {"of": [{"ar": {"phi": 0.8, "total_sd": 2}}, {"constant": 20}], "to": 4}}],
            "c": [{"ceiling": {"of": [{"white_noise": {"sd": 3}}, {"constant": 0.7}], "to": 5}}],
        }
    },
    "curved": {
        "series": {
            "a": [{"power": {"of": [*_AR, {"constant": 2}], "exponent": 2}}],
            "b": [{"sigmoid": {"of": [{"ar": {"phi": 0.8, "total_sd": 1}}], "low": 0, "high": 100}}],
            "c": [{"logit": [{"sigmoid": [{"ar": {"phi": 0.7, "total_sd": 1}}]}]}],
        }
    },
    "windows": {
        "series": {
            "a": [{"rolling_mean": {"of": [{"ar": {"phi": 0.6, "sd": 1, "law": "laplace"}}], "over": 7}}],
            "b": [{"lag": {"of": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.7}}], "by": 3}}],
            "c": [{"hold": {"of": [{"white_noise": {"sd": 3}}], "every": 8}}],
            "d": [{"sum": [{"constant": 5}, {"hold": {"of": [{"exp": _AR}], "every": 2}}]}],
        }
    },
    "gaps": {
        "series": {
            "a": [{"missing": {"of": [{"ar": {"phi": 0.6, "sd": 1}}, {"constant": 3}], "share": 0.1}}],
            "b": [
                {"missing": {"of": [{"random_walk": {"sd": 0.3}}, {"white_noise": {"sd": 1}}], "share": 0.2, "gap": 6}}
            ],
            "c": [{"missing": {"of": [{"ar": {"phi": 0.5, "sd": 1, "law": _T}}], "share": 0.2, "gap": 6}}],
            "d": [{"ar": {"phi": 0.5, "sd": 1}}],
        }
    },
    "moving blocks": {
        "series": {
            "a": [{"moving_blocks": {"values": _RECORD, "length": 4}}, {"trend": {"slope": 0.1}}],
            "b": [{"moving_blocks": {"values": _RECORD, "length": 5, "circular": True}}],
        }
    },
    "finer steps": {
        "series": {
            "a": [{"aggregate": {"of": [{"ar": {"phi": 0.9, "sd": 1}}], "over": 4}}],
            "b": [{"aggregate": {"of": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.7}}], "over": 3, "by": "mean"}}],
            "c": [{"subsample": {"of": [{"random_walk": {"sd": 0.5}}], "over": 5}}],
        }
    },
    "schedule": [
        {"schedule": {"of": [{"ar": {"phi": 0.8, "sd": 1}}], "until": 9, "then": [{"white_noise": {"sd": 2}}]}}
    ],
    "given past": {
        "series": {
            "a": [{"ar": {"phi": [1.2, -0.26], "sd": 0.18, "before": {"x": [0.9, 1.1]}}}],
            "b": [{"arma": {"phi": 0.9, "theta": 0.25, "sd": 0.7, "before": {"x": [-2.4], "shocks": [-0.3]}}}],
            "c": [{"garch": {"sd": 1, "alpha": 0.1, "beta": 0.8, "before": {"variance": 3, "shocks": [2]}}}],
        }
    },
    "stored coarsely": {
        "series": {
            "a": {"type": "int64", "of": [{"constant": 30}, {"ar": {"phi": 0.6, "sd": 4}}]},
            "b": {"type": "float32", "of": [{"random_walk": {"sd": 1, "start": 1000, "law": "laplace"}}]},
            "c": {"decimals": 2, "of": [{"exp": [{"random_walk": {"sd": 0.02, "start": 3}}]}]},
        }
    },
    "long memory": {
        "series": {
            "a": [{"arfima": {"d": 0.3, "phi": 0.4, "sd": 1}}],
            "b": [{"fractional_gaussian_noise": {"hurst": 0.7, "sd": 1}}, {"given": {"values": [3, 5, 4], **_REPEAT}}],
            "c": [{"arfima": {"d": 0.3, "phi": 0.4, "sd": 1, "method": "exact"}}],
        }
    },
    "vectors": {
        "shared": {
            "v": [
                {
                    "vector_arma": {
                        "names": ["a", "b"],
                        "phi": [[0.5, 0.2], [-0.1, 0.7]],
                        "sd": [1, 2],
                        "correlation": [[1, 0.3], [0.3, 1]],
                    }
                }
            ],
            "e": [
                {
                    "vector_error_correction": {
                        "names": ["a", "b"],
                        "relations": [[1, -1]],
                        "adjustment": [[-0.2], [0.1]],
                        "sd": 1,
                    }
                }
            ],
        },
        "series": {
            "a": [{"use": "v.vector_arma.a"}],
            "b": [{"use": "v.vector_arma.b"}],
            "c": [{"use": "e.vector_error_correction.a"}],
            "d": [{"use": "e.vector_error_correction.b"}],
        },
    },
    "prices": {
        "series": {
            "a": [{"geometric_brownian_motion": {"drift": 0.001, "sd": 0.02, "start": 100}}],
            "b": [{"merton": {"sd": 0.01, "rate": 0.1, "jump_mean": -0.02, "jump_sd": 0.05, "start": 100}}],
            "c": [{"bridge": {"start": 100, "end": 120, "until": 150, "sd": 2}}],
            "d": [{"compound_poisson": {"rate": 0.5, "sd": 2}}],
        }
    },
    "counts": {
        "series": {
            "a": [{"poisson": {"mean": 4, "of": [{"ar": {"phi": 0.8, "total_sd": 0.4}}]}}],
            "b": [{"negative_binomial": {"mean": 4, "size": 2}}],
            "c": [{"inar": {"alpha": 0.6, "mean": 5}}],
            "d": [{"zero_inflated": {"of": [{"poisson": {"mean": 4}}], "share": 0.3}}],
            "e": [{"intermittent": {"share": 0.2, "stay": 3, "size": 12, "sd": 6}}],
        }
    },
    "left": {
        "series": {
            "x": {"of": [{"random_walk": {"sd": 0.5}}, {"ar": {"phi": 0.6, "sd": 1}}], "before": _RECORD},
            "y": {"of": [{"ar": {"phi": 0.6, "shock": {"garch": _GARCH}}}], "before": [0.4, -0.3]},
            "z": {"of": [{"arma": {"phi": 0.5, "theta": 0.4, "sd": 1}}], "before": [0.3, -1.2]},
        }
    },
    "uneven steps": {
        "time": {"start": "2027-01-29", "every": "1 business day", "holidays": ["2027-02-03", "2027-02-08"]},
        "series": {
            "x": [{"ornstein_uhlenbeck": {"rate": 0.2, "mean": 3, "sd": 0.2, "clock": "time"}}],
            "y": [{"ornstein_uhlenbeck": {"rate": 0.6, "total_sd": 2, "clock": "time"}}, {"ar": {"phi": 0.5, "sd": 1}}],
        },
        "correlation": [{"between": ["x.ornstein_uhlenbeck", "y.ornstein_uhlenbeck"], "value": 0.4}],
    },
    "distributed lags": {
        "series": {
            "x": [{"distributed_lag": {"of": [{"white_noise": {"sd": 1, "law": "laplace"}}], "phi": [0.5, 0.2]}}],
            "y": [
                {
                    "distributed_lag": {
                        "of": [
                            {
                                "regimes": {
                                    "branches": {"low": [{"constant": 0}], "high": [{"constant": 3, "as": "c"}]},
                                    "durations": {"low": 6, "high": 3},
                                }
                            },
                            {"white_noise": {"sd": 1}},
                        ],
                        "phi": 0.7,
                    }
                }
            ],
        }
    },
}


# Families that get all the runs that are asked for: cheap ones, of every sort. The others get a tenth.
OFTEN = (
    "white noise", "walk", "ar", "seasonal", "rounded", "student", "laplace", "garch", "lognormal", "product",
    "garch in noise", "stochastic volatility", "regimes", "skewed sums",
)  # fmt: skip
LONGEST = {"long memory": 10_000}  # what is drawn exactly is drawn for no more steps


def stated(family: str, steps: int) -> Any:
    """The body of a family; its grid gets the number of steps."""
    body = copy.deepcopy(FAMILIES[family])
    if isinstance(body, dict) and "time" in body:
        body["time"]["steps"] = steps
    return body


def words(tree: Any) -> Iterator[str]:
    """Every key and every text in plain data: kinds and laws are among them."""
    if isinstance(tree, Mapping):
        for key, value in tree.items():
            yield str(key)
            yield from words(value)
    elif isinstance(tree, list):
        for value in tree:
            yield from words(value)
    elif isinstance(tree, str):
        yield tree
