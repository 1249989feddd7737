"""Requests put together and answered without a server: bytes in, answer out."""

import json

from service import calculate, intake, problems
from service.executors import Work
from service.settings import Settings


def answered(calculation, document, *, work=None, **settings):
    """Return the answer of a request given as a document."""
    return answered_text(calculation, json.dumps(document).encode(), work=work, **settings)


def answered_text(calculation, body, *, work=None, **settings):
    """Return the answer of a request in JSON."""
    chosen = Settings(**settings)
    read = intake.read(calculation, body, content_type=intake.JSON, parameters=(), settings=chosen)
    return calculate.answer(read, work or Work(1), chosen, problems.describe)


def factor_model(marginals, sub_portfolios, *, dependence=None, scenarios=100_000, seed=1, **simulation):
    """Return `losses` of a factor spec.

    Parameters
    ----------
    marginals : dict
        Law of each factor by its id.
    sub_portfolios : dict
        By id: one component, a list of them, or a whole sub-portfolio without its id.
    """
    losses = {
        "kind": "factors",
        "factors": [{"id": name, "marginal": law} for name, law in marginals.items()],
        "sub_portfolios": [{"id": name, **_whole(one)} for name, one in sub_portfolios.items()],
        "simulation": {"scenarios": scenarios, "seed": seed, **simulation},
    }
    return losses | ({"dependence": dependence} if dependence else {})


def _whole(one):
    if isinstance(one, dict) and "components" in one:
        return one
    return {"components": one if isinstance(one, list) else [one]}


def linear(**amounts):
    return {"kind": "linear", "exposures": [{"factor": name, "amount": amount} for name, amount in amounts.items()]}


def compound(frequency, severity, **more):
    return {"kind": "compound", "frequency": frequency, "severity": severity, **more}


def law(family, **parameters):
    return {"family": family, **parameters}


def step(kind, **parameters):
    return {"kind": kind, **parameters}


def var(level, **more):
    return {"kind": "value_at_risk", "level": level, **more}


def es(level, **more):
    return {"kind": "expected_shortfall", "level": level, **more}


def equal(value):
    return {"kind": "equal", "value": value}


def matrix(values):
    return {"kind": "matrix", "values": [list(row) for row in values]}
