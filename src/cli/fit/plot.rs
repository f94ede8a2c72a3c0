//! One look as a picture: the readings, the curves, the band of new readings, the residuals below.

