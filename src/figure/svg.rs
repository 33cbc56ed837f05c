//! Scene -> SVG: plain paths, texts, images, clips.

use std::fmt::Write;

use base64::Engine;

use super::font::FAMILY;
use super::scene::{Anchor, Ink, Item, Scene, Span, Style, TextStyle};

/// Width of the rim around texts on a field, over the font size.
const HALO: f64 = 0.16;

/// A number with at most three decimals, without trailing zeros.
fn number(value: f64) -> String {
    // What is not a number must not spoil the document; the layout leaves such points out before.
    let value = if value.is_finite() { value } else { 0.0 };
    let text = format!("{value:.3}");
    let text = text.trim_end_matches('0').trim_end_matches('.');
    if text == "-0" { "0".to_owned() } else { text.to_owned() }
}

/// Text made safe for XML; control characters are dropped.
pub fn escape(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            c if c.is_control() || matches!(c, '\u{fffe}' | '\u{ffff}') => {}
            c => out.push(c),
        }
    }
    out
}

fn paint(name: &str, ink: Option<Ink>) -> String {
    match ink {
        None => format!(" {name}=\"none\""),
        Some(ink) => {
            let [r, g, b] = ink.rgb;
            let opacity =
                if ink.opacity < 1.0 { format!(" {name}-opacity=\"{}\"", number(ink.opacity)) } else { String::new() };
            format!(" {name}=\"#{r:02x}{g:02x}{b:02x}\"{opacity}")
        }
    }
}

fn look(style: &Style) -> String {
    let mut out = paint("fill", style.fill);
    if let Some((ink, width)) = style.stroke {
        out += &paint("stroke", Some(ink));
        out += &format!(" stroke-width=\"{}\" stroke-linejoin=\"round\" stroke-linecap=\"round\"", number(width));
    }
    if let Some([on, off]) = style.dash {
        out += &format!(" stroke-dasharray=\"{} {}\"", number(on), number(off));
    }
    out
}

fn write_text(out: &mut String, at: [f64; 2], spans: &[Span], style: &TextStyle) {
    let anchor = match style.anchor {
        Anchor::Start => "start",
        Anchor::Middle => "middle",
        Anchor::End => "end",
    };
    let (x, y, size) = (number(at[0]), number(at[1]), number(style.size));
    let turn = match number(style.angle).as_str() {
        "0" => String::new(),
        angle => format!(" transform=\"rotate({angle} {x} {y})\""),
    };
    let all_italic = spans.iter().all(|s| s.italic);
    let slant = if all_italic { " font-style=\"italic\"" } else { "" };
    let body: String = spans
        .iter()
        .map(|span| match span.italic && !all_italic {
            true => format!("<tspan font-style=\"italic\">{}</tspan>", escape(&span.text)),
            false => escape(&span.text),
        })
        .collect();
    let base = format!("x=\"{x}\" y=\"{y}\" font-size=\"{size}\" text-anchor=\"{anchor}\"{slant}{turn}");
    if style.halo {
        let rim = number(HALO * style.size);
        let _ = writeln!(
            out,
            "<text {base} fill=\"none\" stroke=\"#ffffff\" stroke-width=\"{rim}\" stroke-opacity=\"0.7\" stroke-linejoin=\"round\">{body}</text>",
        );
    }
    let _ = writeln!(out, "<text {base} fill=\"#1b1f24\">{body}</text>");
}

/// The scene as an SVG document of the stated size in millimeters.
pub fn to_svg(scene: &Scene, title: &str) -> String {
    let mut out = String::new();
    let (w, h) = (number(scene.width), number(scene.height));
    let _ = writeln!(
        out,
        "<svg xmlns=\"http://www.w3.org/2000/svg\" xmlns:xlink=\"http://www.w3.org/1999/xlink\" width=\"{w}mm\" height=\"{h}mm\" viewBox=\"0 0 {w} {h}\" font-family=\"'{FAMILY}', sans-serif\">"
    );
    let _ = writeln!(out, "<title>{}</title>", escape(title));
    let _ = writeln!(out, "<rect width=\"{w}\" height=\"{h}\" fill=\"#ffffff\"/>");
    let mut clips = 0;
    for item in &scene.items {
        match item {
            Item::Path { pieces, style } => {
                let mut d = String::new();
                for (vertices, closed) in pieces {
                    let mut last = [f64::NAN; 2];
                    for (k, v) in vertices.iter().enumerate() {
                        // Vertices nearer than print can show are left out.
                        if k > 0 && k + 1 < vertices.len() && (v[0] - last[0]).hypot(v[1] - last[1]) < 0.02 {
                            continue;
                        }
                        let _ = write!(d, "{}{} {}", if k == 0 { "M" } else { "L" }, number(v[0]), number(v[1]));
                        last = *v;
                    }
                    if *closed {
                        d.push('Z');
                    }
                }
                let _ = writeln!(out, "<path d=\"{d}\"{}/>", look(style));
            }
            Item::Text { at, spans, style } => write_text(&mut out, *at, spans, style),
            Item::Image { at, size, png } => {
                let data = base64::engine::general_purpose::STANDARD.encode(png);
                let _ = writeln!(
                    out,
                    "<image x=\"{}\" y=\"{}\" width=\"{}\" height=\"{}\" preserveAspectRatio=\"none\" xlink:href=\"data:image/png;base64,{data}\"/>",
                    number(at[0]),
                    number(at[1]),
                    number(size[0]),
                    number(size[1])
                );
            }
            Item::Clip { at, size } => {
                clips += 1;
                let _ = writeln!(
                    out,
                    "<clipPath id=\"clip{clips}\"><rect x=\"{}\" y=\"{}\" width=\"{}\" height=\"{}\"/></clipPath><g clip-path=\"url(#clip{clips})\">",
                    number(at[0]),
                    number(at[1]),
                    number(size[0]),
                    number(size[1])
                );
            }
            Item::EndClip => out.push_str("</g>\n"),
        }
    }
    out.push_str("</svg>\n");
    out
}
