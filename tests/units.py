"""Physical units in which the tolerances of the tests are written."""

from ngbound.constants import ARCSEC_RAD, AU_KM, DAY_S

arcsec = ARCSEC_RAD
mas = ARCSEC_RAD / 1e3
km = 1.0 / AU_KM
metre = km / 1e3
second = 1.0 / DAY_S
