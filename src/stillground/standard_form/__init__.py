"""From a measurement to the pair (A_s, b) in which every norm and adjoint is the Euclidean one."""

from stillground.standard_form.background import fit_background
from stillground.standard_form.standard import StandardForm, standard_form

__all__ = ["StandardForm", "fit_background", "standard_form"]
