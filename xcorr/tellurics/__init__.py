"""The Earth's transmission, line by line, fitted to the star of an exposure.

Model of the star's spectrum, with cubic B-splines c (its continuum times the throughput):

    star = c(lambda) * LSF_R (x) [ T_H2O^water * prod_x T_x^airmass ](v)

c is linear and eliminated (variable projection: Golub & Pereyra 1973, SIAM J. Numer. Anal. 10, 413); water,
airmass, velocity and R are found by Gauss-Newton from a coarse grid. Stellar lines and bad channels are
down-weighted (Tukey's biweight).
"""

from xcorr.tellurics.fit import fit_transmission
from xcorr.tellurics.types import TelluricFit, TransmissionTable

__all__ = ["TelluricFit", "TransmissionTable", "fit_transmission"]
