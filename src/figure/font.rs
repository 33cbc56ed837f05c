//! The font in the figure and the width of its texts.

use ttf_parser::Face;

/// DejaVu Sans, reduced to Latin, Greek, mathematical signs, super- and subscripts; license beside it.
pub const REGULAR: &[u8] = include_bytes!("fonts/DejaVuSans.ttf");
/// DejaVu Sans Oblique, reduced likewise.
pub const OBLIQUE: &[u8] = include_bytes!("fonts/DejaVuSans-Oblique.ttf");
/// Family name.
pub const FAMILY: &str = "DejaVu Sans";
/// Height of capital letters over the font size.
pub const CAP_HEIGHT: f64 = 0.73;
/// Width assumed for a letter the font does not hold, over the font size.
const UNKNOWN: f64 = 0.6;

/// Width of a text in units of the font size.
pub fn width(text: &str, italic: bool) -> f64 {
    let Ok(face) = Face::parse(if italic { OBLIQUE } else { REGULAR }, 0) else {
        return UNKNOWN * text.chars().count() as f64;
    };
    let em = f64::from(face.units_per_em());
    text.chars()
        .map(|c| {
            face.glyph_index(c)
                .and_then(|g| face.glyph_hor_advance(g))
                .map_or(UNKNOWN, |advance| f64::from(advance) / em)
        })
        .sum()
}

/// UDUNITS exponents as superscripts: `mm2 s-1` becomes `mm² s⁻¹`; anything else is left as it is.
pub fn typeset_unit(unit: &str) -> String {
    unit.split(' ')
        .map(|word| {
            let letters = word.trim_end_matches(|c: char| c.is_ascii_digit() || c == '-');
            if letters.is_empty() || letters.len() == word.len() {
                return word.to_owned();
            }
            let raised: String = word[letters.len()..]
                .chars()
                .map(|c| match c {
                    '-' => '⁻',
                    '1' => '¹',
                    '2' => '²',
                    '3' => '³',
                    d => char::from_u32(0x2070 + d.to_digit(10).unwrap_or(0)).unwrap_or(d),
                })
                .collect();
            format!("{letters}{raised}")
        })
        .collect::<Vec<_>>()
        .join(" ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exponents_are_raised() {
        assert_eq!(typeset_unit("mm2 s-1"), "mm² s⁻¹");
        assert_eq!(typeset_unit("m"), "m");
        assert_eq!(typeset_unit("arbitrary"), "arbitrary");
        assert!(width("ψ = 12", true) > 2.0 && width("", false) == 0.0);
    }
}
