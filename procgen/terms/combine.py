"""Combinations of bodies: sum, scaling, product, exponential, and the use of what is named elsewhere."""

from __future__ import annotations

import numpy as np

from procgen.chance.portable import exp, log
from procgen.spec.declare import Body, Parameter, Text
from procgen.terms import instate
from procgen.terms.base import LEAST_LOG, Ahead, Term, Unknown, number
from procgen.terms.support import POSITIVE, added, finite

OF = Parameter("of", "", Body(), "what it is applied to; a list is a sum")


class Sum(Term):
    kind = "sum"
    smooth = "filter"
    family = "combination"
    purpose = "its parts added up; a list is a sum by itself"
    source = "common practice, no source"
    example = "sum: [{constant: 5}, {white_noise: {sd: 1}}]"
    knows = "mean and covariance by bilinearity"
    composition = True
    separate = True
    parameters = (Parameter("of", "", Body(), "the parts"),)

    def reach(self, head):
        return (head,) * self.arity

    def begin(self, before):
        return _added([part[len(part) - before.head :] for part in before.inputs]), {}

    def early(self):
        return 0

    def recurse(self, inputs, state, at):
        return _added(inputs), state

    def invert(self, values, known, state, at):
        for part in known:
            if part is not None:
                values = values - part
        return values, {}

    def in_state(self, parts, state):
        return instate.added(parts)

    def ahead(self, steps, state, *inputs):
        return Ahead(_added([x.mean for x in inputs]), _added([x.variance for x in inputs]))

    def support(self, *inputs):
        return added(inputs)

    def moments(self, axis, *inputs):
        total = inputs[0]
        for part in inputs[1:]:
            total = total + part
        return total

    def equation(self, *inputs):
        return f"y[t] = {' + '.join(f'{name}[t]' for name in inputs)}"


class Scaled(Term):
    """A factor on a body, from `times:`; not a kind of its own."""

    by_rows = ("factor",)
    begins_by_rows = True

    def __init__(self, factor):
        super().__init__({"factor": factor})

    def reach(self, head):
        return (head,)

    def begin(self, before):
        return self.factor * before.inputs[0][len(before.inputs[0]) - before.head :], {}

    def early(self):
        return 0

    def recurse(self, inputs, state, at):
        return self.factor * inputs[0], state

    def invert(self, values, known, state, at):
        return Unknown("a body times 0 is lost") if self.factor == 0 else (values / self.factor, {})

    def in_state(self, parts, state):
        return parts[0].times(self.factor)

    def ahead(self, steps, state, body):
        return Ahead(self.factor * body.mean, self.factor * self.factor * body.variance)

    def support(self, body):
        return body * finite([self.factor])

    def moments(self, axis, body):
        return body * self.factor

    def equation(self, body):
        return f"y[t] = {number(self.factor)} {body}[t]"


class Product(Term):
    kind = "product"
    smooth = "bend"
    family = "combination"
    purpose = "its parts multiplied"
    source = "Goodman (1960) for independent parts"
    example = "product: [{constant: 3}, {exp: [{ar: {phi: 0.9, total_sd: 0.2}}]}]"
    knows = "mean and covariance for independent parts, and for any Gaussian ones"
    composition = True
    separate = True
    parameters = (Parameter("of", "", Body(), "the factors"),)

    def reach(self, head):
        return (head,) * self.arity

    def begin(self, before):
        return _multiplied([part[len(part) - before.head :] for part in before.inputs]), {}

    def recurse(self, inputs, state, at):
        return _multiplied(inputs), state

    def invert(self, values, known, state, at):
        for part in known:
            if part is not None:
                if np.any(part == 0.0):
                    return Unknown("a factor is 0 somewhere: what it multiplies is lost there")
                values = values / part
        return values, {}

    def in_state(self, parts, state):
        return instate.multiplied(parts)

    def support(self, *inputs):
        first, *others = inputs
        for part in others:
            first = first * part
        return first

    def moments(self, axis, *inputs):
        return axis.product(inputs)

    def equation(self, *inputs):
        return f"y[t] = {' · '.join(f'{name}[t]' for name in inputs)}"


class Exp(Term):
    kind = "exp"
    smooth = "filter"
    family = "combination"
    purpose = "the exponential of its body: a level that cannot fall below 0"
    source = "Aitchison & Brown (1957) for the lognormal moments"
    example = "exp: [{random_walk: {sd: 0.01, start: 3.9}}]"
    knows = "mean, covariance and lognormal law for a Gaussian body; moments for shocks of most laws, where they exist"
    composition = True
    parameters = (OF,)
    told = LEAST_LOG, np.inf

    def reach(self, head):
        return (head,)

    def begin(self, before):
        return exp(before.inputs[0][len(before.inputs[0]) - before.head :]), {}

    def recurse(self, inputs, state, at):
        return exp(inputs[0]), state

    def invert(self, values, known, state, at):
        if np.any(values <= 0.0):
            return Unknown("some values are not above 0, which an exponential always is")
        return log(values), {}

    def support(self, body):
        if body.values is not None:
            return finite(float(exp(np.float64(x))) for x in body.values)
        return POSITIVE

    def moments(self, axis, body):
        return body.exp()

    def equation(self, body):
        return f"y[t] = exp({body}[t])"


class Use(Term):
    kind = "use"
    smooth = "filter"
    family = "combination"
    purpose = "what is named elsewhere: a shared body, another series, one of its terms, or a hidden output"
    source = "common practice, no source"
    example = "use: weather"
    knows = "whatever is known of what it names; what is shared is drawn once a path"
    composition = True
    short = "name"
    parameters = (Parameter("name", "", Text(), "a shared body, a series, series.label, or series.label.output"),)


class Hidden(Term):
    """A hidden output of a term, as a series of its own; not a kind of its own."""

    def __init__(self, output):
        super().__init__({"output": output})

    def reach(self, head):
        return (head,)

    def moments(self, axis, body):
        return body.hidden(self.output)

    def equation(self, body):
        return f"y[t] = {self.output} of {body}"


def _added(parts):
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    return total


def _multiplied(parts):
    total = parts[0]
    for part in parts[1:]:
        total = total * part
    return total
