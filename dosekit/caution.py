"""The research-only wording that every output carries.

One place, so that console, figures, tables, NetCDF, DICOM and reports say the same.
"""

from __future__ import annotations

__all__ = ["BANNER", "CAUTION", "SHORT_CAUTION", "caution_comment"]

BANNER = "RESEARCH ONLY - NOT FOR CLINICAL USE"

SHORT_CAUTION = BANNER + ": model calculation, not validated for patient care."

CAUTION = (
    BANNER + ". dosekit is a research tool. Its doses rest on evaluated and partly unmeasured nuclear data "
    "(star yields carry uncertainties of 15 to 40 %), on simplified transport and on user input that it "
    "cannot verify. Nothing here may be used to treat, plan for or advise a patient. Clinical work and "
    "radiation protection belong to licensed staff, approved systems and the codes that apply locally."
)


def caution_comment(prefix: str = "# ") -> str:
    """Return the caution as comment lines for a text file, at most 100 characters wide.

    Parameters
    ----------
    prefix : str
        What each line begins with.

    Returns
    -------
    str
        Lines ending in a newline.

    Examples
    --------
    >>> caution_comment().splitlines()[0][:38]
    '# RESEARCH ONLY - NOT FOR CLINICAL USE'
    """
    import textwrap

    lines = textwrap.wrap(CAUTION, width=100 - len(prefix))
    return "".join(f"{prefix}{line}\n" for line in lines)
