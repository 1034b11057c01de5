//! Colours that remain distinct for colour-blind readers and in grey print.
//! Owns the tables; never decides what is drawn.

/// Every eighth entry (33 of 256) of the viridis table by S. van der Walt, N. Smith and E. Firing (2015),
/// placed in the public domain under CC0. Between entries the colour is interpolated linearly, which
/// stays within 2 of 255 of the full table (compared with all 256 entries).
const VIRIDIS: [u32; 33] = [
    0x440154, 0x470d60, 0x48186a, 0x482374, 0x472d7b, 0x453781, 0x424086, 0x3e4989, 0x3b528b,
    0x375b8d, 0x33638d, 0x2f6b8e, 0x2c728e, 0x297a8e, 0x26828e, 0x23898e, 0x21918c, 0x1f978b,
    0x1f9f88, 0x21a685, 0x27ad81, 0x31b57b, 0x3dbc74, 0x4cc26c, 0x5cc863, 0x6ece58, 0x81d34d,
    0x95d840, 0xaadc32, 0xc0df25, 0xd5e21a, 0xeae51a, 0xfde725,
];

/// Text and axes.
pub const INK: &str = "#1a1a1a";
/// Names, notes and less important lines.
pub const FAINT: &str = "#555555";
/// Points that carry a flag: vermilion of the set by M. Okabe and K. Ito (2008).
pub const FLAG: &str = "#d55e00";
/// Points in the residual panel: blue of the same set.
pub const POINT: &str = "#0072b2";

/// Colour at `fraction` of the viridis map as `#rrggbb`; held to 0 and 1, and grey where it is not a number.
pub fn viridis(fraction: f64) -> String {
    if fraction.is_nan() {
        return "#cccccc".to_owned();
    }
    let place = fraction.clamp(0.0, 1.0) * (VIRIDIS.len() - 1) as f64;
    let below = (place.floor() as usize).min(VIRIDIS.len() - 2);
    let share = place - below as f64;
    let part = |shift: u32| {
        let low = f64::from(VIRIDIS[below] >> shift & 0xff);
        let high = f64::from(VIRIDIS[below + 1] >> shift & 0xff);
        (low + share * (high - low)).round() as u8
    };
    format!("#{:02x}{:02x}{:02x}", part(16), part(8), part(0))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ends_and_middle_are_those_of_the_table() {
        assert_eq!(viridis(0.0), "#440154");
        assert_eq!(viridis(1.0), "#fde725");
        assert_eq!(viridis(0.5), "#21918c");
        assert_eq!(viridis(-3.0), viridis(0.0));
        assert_eq!(viridis(f64::INFINITY), viridis(1.0));
        assert_eq!(viridis(f64::NAN), "#cccccc");
    }

    #[test]
    fn lightness_rises_all_the_way() {
        // Rec. 709 weights of the linearised parts; a map that folds back would misread.
        let luminance = |step: u32| {
            let text = viridis(f64::from(step) / 64.0);
            let part = |at: usize| {
                let value = f64::from(u8::from_str_radix(&text[at..at + 2], 16).unwrap());
                (value / 255.0).powf(2.2)
            };
            0.2126 * part(1) + 0.7152 * part(3) + 0.0722 * part(5)
        };
        assert!((1..=64).all(|step| luminance(step) > luminance(step - 1)));
    }
}
