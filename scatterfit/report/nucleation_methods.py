"""A paragraph for the methods section of a paper, with the choices that were made."""

import textwrap

_WIDTH = 80


def methods_text(result, kind):
    """Return a paragraph that says how rates or an activation were found.

    Parameters
    ----------
    result : mapping
        As ``rates --json`` or ``activation --json`` print it.
    kind : str
        ``"rates"`` or ``"activation"``.

    Returns
    -------
    text : str
        A title and wrapped lines.
    """
    sentences = _rates(result) if kind == "rates" else _activation(result)
    version = result["provenance"]["versions"]["scatterfit"]
    sentences = [f"Pulses were analysed with scatterfit {version}.", *sentences]
    lines = textwrap.wrap(" ".join(sentences), _WIDTH - 2, break_on_hyphens=False)
    return "\n".join(["For the methods section", *(f"  {line}" for line in lines)])


def _rates(result):
    settings, isotherms = result["settings"], result["isotherms"]
    tolerance = settings["tolerance_K"]
    grouped = ("the classification likelihood of a normal mixture" if tolerance is None else
               f"a largest distance of {tolerance:g} K from the middle")
    count = len(isotherms)
    yield (f"Pulses were grouped into {count} isotherm{'s' * (count != 1)} by {grouped}, and ln J "
           "was fitted linearly to ln S.")
    if settings["to_isotherm"]:
        yield "Each rate was first brought to the temperature of its isotherm by theory."
    if any(isotherm["chi2_reduced"] is not None for isotherm in isotherms):
        yield ("Stated errors of both coordinates were taken into account (York et al. 2004), with "
               "scatter beyond them added to ln J (Paule and Mandel 1982); errors shared by all "
               "pulses were propagated apart.")
    else:
        yield ("The fit is ordinary least squares; uncertainties follow from the scatter and hold "
               "no error that all pulses share.")
    if any(isotherm["censored"] for isotherm in isotherms):
        yield ("Pulses without a cloud entered by the likelihood of their 95 percent upper "
               "limits.")
    if any(isotherm["outliers"] for isotherm in isotherms):
        yield ("Outliers (beyond 3.5 robust standard deviations) were kept; a Huber estimate of "
               "the slope is given beside.")
    yield (f"The size of the critical cluster follows from the nucleation theorem in the form "
           f"{settings['critical_cluster_convention'].replace('slope', 'd ln J/d ln S')} "
           "(Kashchiev 1982). S is the saturation ratio over the (supercooled) liquid.")
    sources = [theory["source"] for theory in result["theories"].values()]
    yield f"Rates were compared with: {'; '.join(sources)}."
    properties = {}
    for name, source in result["properties"].items():
        properties.setdefault(source, []).append(name.replace("_", " "))
    yield ("Properties of the liquid: " + "; ".join(
        f"{' and '.join(names)}: {source}" for source, names in properties.items()) + ".")
    lost = [isotherm["losses"] for isotherm in isotherms if isotherm["losses"]]
    if lost and lost[0]["corrected"]:
        most = max(one["lost_percent"]["value"] for one in lost)
        yield (f"Rates were corrected for a background of larger particles, by up to {most:.2g} "
               "percent of J: droplets swept up (Kerminen and Kulmala 2002, coagulation after "
               "Dahneke 1983) and vapour taken by the growing particles during the hold.")


def _activation(result):
    yield ("Activated fractions are numbers of droplets over numbers of seeds "
           f"({result['density']}).")
    yield ("A cumulative normal curve in ln S was fitted by maximum quasi-likelihood with a "
           "variance of counting and of proportional scatter (Wedderburn 1974), its covariance "
           "taken from the residuals; the onset is the S of half activation, the width the "
           "standard deviation of ln S.")
    if any(run["plateau_fitted"] for run in result["isotherms"]):
        yield "The fraction far beyond the onset was fitted where it differed from one."
    yield ("Thresholds are those of Kelvin (1871), of kappa-Koehler theory (Petters and "
           "Kreidenweis 2007) and of heterogeneous nucleation on spheres (Fletcher 1958) with a "
           "kinetic prefactor of 1e25 per cm2 and s. S is the saturation ratio over the liquid.")
