"""What all tests share."""

import warnings

import numpy as np

# colour-science is the outside reference of many tests.  Its import complains about an absent matplotlib
# and changes how numpy prints, which the doctests would see.
_options = np.get_printoptions()
with warnings.catch_warnings():
    warnings.filterwarnings("ignore", message='.*"Matplotlib" related API features.*')
    import colour  # noqa: F401
np.set_printoptions(**_options)
