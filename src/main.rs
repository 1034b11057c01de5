//! The `darkline` program: hands its arguments to the command line and returns its exit code.

fn main() {}
