//! The font in the figure, the extent of its texts, and how units and variables are set.

use std::sync::LazyLock;

use ttf_parser::Face;

use super::scene::Span;

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

static FACES: LazyLock<[Option<Face<'static>>; 2]> =
    LazyLock::new(|| [Face::parse(REGULAR, 0).ok(), Face::parse(OBLIQUE, 0).ok()]);

/// Extent of a text in units of the font size.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Extent {
    /// Sum of the advance widths.
    pub width: f64,
    /// Ink above the baseline.
    pub above: f64,
    /// Ink below the baseline, positive.
    pub below: f64,
}

/// Extent of spans set one after the other.
pub fn extent(spans: &[Span]) -> Extent {
    let mut out = Extent { width: 0.0, above: 0.0, below: 0.0 };
    for span in spans {
        let face = FACES[usize::from(span.italic)].as_ref();
        let em = face.map_or(1.0, |f| f64::from(f.units_per_em()));
        for c in span.text.chars() {
            let glyph = face.and_then(|f| f.glyph_index(c));
            let advance = face.zip(glyph).and_then(|(f, g)| f.glyph_hor_advance(g));
            out.width += advance.map_or(UNKNOWN, |a| f64::from(a) / em);
            match face.zip(glyph).and_then(|(f, g)| f.glyph_bounding_box(g)) {
                Some(ink) => {
                    out.above = out.above.max(f64::from(ink.y_max) / em);
                    out.below = out.below.max(-f64::from(ink.y_min) / em);
                }
                None if glyph.is_none() => out.above = out.above.max(CAP_HEIGHT),
                None => {}
            }
        }
    }
    out
}

/// Width of spans in units of the font size.
pub fn width(spans: &[Span]) -> f64 {
    extent(spans).width
}

/// Variables that stand in running text: set slanted.
const VARIABLES: [char; 2] = ['ψ', 'σ'];

/// Splits a text into upright words and slanted variables.
pub fn spans(text: &str) -> Vec<Span> {
    let mut out: Vec<Span> = Vec::new();
    for c in text.chars() {
        let italic = VARIABLES.contains(&c);
        match out.last_mut() {
            Some(last) if last.italic == italic => last.text.push(c),
            _ => out.push(Span { text: c.to_string(), italic }),
        }
    }
    out
}

/// Name and unit of an axis or a color bar, `x (mm)`; a power of ten taken out of the ticks stands before the unit.  Names of one
/// letter are variables; the unit "1" is left out.
pub fn quantity(name: &str, power: i32, unit: &str) -> Vec<Span> {
    let mut out =
        if name.chars().count() == 1 { vec![Span { text: name.to_owned(), italic: true }] } else { spans(name) };
    let ten = if power == 0 { String::new() } else { format!("10{}", superscript(power)) };
    let unit = if unit == "1" { String::new() } else { typeset_unit(unit) };
    let space = if ten.is_empty() || unit.is_empty() { "" } else { " " };
    if !(ten.is_empty() && unit.is_empty()) {
        out.push(Span { text: format!(" ({ten}{space}{unit})"), italic: false });
    }
    out
}

/// A whole number as superscript.
pub fn superscript(power: i32) -> String {
    raise(&power.to_string())
}

fn raise(digits: &str) -> String {
    digits
        .chars()
        .map(|c| match c {
            '-' => '⁻',
            '1' => '¹',
            '2' => '²',
            '3' => '³',
            d => d.to_digit(10).and_then(|d| char::from_u32(0x2070 + d)).unwrap_or(d),
        })
        .collect()
}

/// UDUNITS exponents as superscripts: `mm2 s-1` becomes `mm² s⁻¹`; anything else is left as it is.
pub fn typeset_unit(unit: &str) -> String {
    unit.split(' ')
        .map(|word| {
            let letters = word.trim_end_matches(|c: char| c.is_ascii_digit() || c == '-');
            if letters.is_empty() || letters.len() == word.len() {
                return word.to_owned();
            }
            let letters_shown = if letters == "um" { "µm" } else { letters };
            format!("{letters_shown}{}", raise(&word[letters.len()..]))
        })
        .map(|word| if word == "um" { "µm".to_owned() } else { word })
        .collect::<Vec<_>>()
        .join(" ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exponents_are_raised() {
        assert_eq!(typeset_unit("mm2 s-1"), "mm² s⁻¹");
        assert_eq!(typeset_unit("um2 s-1"), "µm² s⁻¹");
        assert_eq!(typeset_unit("um"), "µm");
        assert_eq!(typeset_unit("m"), "m");
        assert_eq!(typeset_unit("arbitrary"), "arbitrary");
        assert_eq!(superscript(-7), "⁻⁷");
    }

    #[test] // advance widths of DejaVu Sans 2.37: digits 1303, space 651 of 2048 units
    fn widths_are_those_of_the_font() {
        approx::assert_abs_diff_eq!(width(&spans("12 3")), (3.0 * 1303.0 + 651.0) / 2048.0, epsilon = 1e-12);
        assert!(extent(&spans("p")).below > 0.1 && extent(&spans("1")).below == 0.0 && width(&[]) == 0.0);
    }

    #[test]
    fn every_sign_a_figure_writes_is_in_the_font() {
        for c in "0123456789+−.,·×()=/<>±°⁰¹²³⁴⁵⁶⁷⁸⁹⁻µψσωΔ∂∇ABCXYZabcxyz".chars() {
            let face = FACES[0].as_ref().unwrap();
            assert!(face.glyph_index(c).is_some(), "{c}");
        }
        for c in "xyψσ".chars() {
            assert!(FACES[1].as_ref().unwrap().glyph_index(c).is_some(), "{c}");
        }
    }

    #[test]
    fn variables_are_slanted_and_words_are_not() {
        let label = quantity("x", 0, "mm");
        assert!(label[0].italic && label[0].text == "x" && label[1].text == " (mm)");
        assert_eq!(quantity("speed", -3, "1")[1].text, " (10⁻³)");
        assert_eq!(spans("step, ψ = 0").iter().map(|s| s.italic).collect::<Vec<_>>(), [false, true, false]);
    }
}
