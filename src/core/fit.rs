//! Estimation: least squares, line shapes, and the field law across points. Knows no file and no instrument.
