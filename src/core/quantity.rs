//! Quantities with units: parsing and printing. Everything inside the program is `f64` in SI base units.
