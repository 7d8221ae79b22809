"""The usual cautions where a wrong closure could mislead; said wherever one is shown."""

from __future__ import annotations

CAUTIONS = (
    "A closure is evidence for the regimes it was trained on and for nothing else. Operational "
    "use defers to the modelling centre's own validation.",
    "The tensor is undetermined where mean tracer gradients are weak or nearly parallel: look at "
    "its condition number, standard error and reliability before its value.",
    "A local tensor cannot carry fluxes that are non-local or rotational; scores below the "
    "ceiling are not all the regressor's fault, and none says anything of momentum.",
    "alpha, the antisymmetric part, acts only through its gradient; a constant added to it moves "
    "no tracer.",
    "Random folds flatter. Scores on whole regions left out, beside ceiling and baselines, are "
    "the ones to believe; few regions make them uncertain.",
    "Half-widths are calibrated over regions; with few regions their promise is weak.",
    "Trust is a range guard. It says that inputs are unlike the training sample, not that a "
    "prediction inside it is right.",
    "A closure trained at one resolution is not for another; eddies a host resolves in part would "
    "be counted twice.",
)

NOT_FOR = (
    "regimes, resolutions or seas unlike those it was trained on",
    "the equator, marginal seas, shelves, the mixed layer, or under ice, unless trained there",
    "buoyancy, thickness or potential vorticity fluxes: it was made from passive tracers",
    "any operational use before the modelling centre has validated it in its own model",
)
