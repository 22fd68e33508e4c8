"""Rows of bars with value, error and share written beside them."""

from carriersim.figures.style import Style
from carriersim.formatting import format_scaled, format_share

COLUMNS = 2.08  # inches that the columns take at the right of the axes
SHOWN_ERROR = 0.004  # smaller errors, as a share of the whole, have no whisker


def write_columns(ax, estimates, whole, unit, style: Style) -> None:
    """Value with error and share of the whole at the right of each row; whole None: no shares.

    estimates: an Estimate, or a number where no error is known, for each row.
    """
    box = ax.get_position()
    width = ax.figure.get_size_inches()[0] * box.width
    values, shares = 1.0 + 1.4 / width, 1.0 + 1.96 / width
    kwargs = {"transform": ax.get_yaxis_transform(), "va": "center", "fontsize": style.small,
              "color": style.ink, "ha": "right"}  # fmt: skip
    head = {**kwargs, "va": "bottom", "color": style.soft}
    ax.text(values, -0.62, "± one std. error", **head)
    if whole is not None:
        ax.text(shares, -0.62, "share", **head)
    for row, estimate in enumerate(estimates):
        value, error = value_of(estimate), getattr(estimate, "error", None)
        ax.text(values, row, format_scaled(value, error, unit, 4), **kwargs)
        if whole is not None:
            ax.text(shares, row, format_share(value, whole), **kwargs)


def value_of(estimate):
    """The number in an Estimate, or the number itself."""
    return getattr(estimate, "value", estimate)


def error_of(estimate):
    """The standard error in an Estimate, 0 where none is known."""
    return getattr(estimate, "error", None) or 0.0
