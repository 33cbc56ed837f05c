//! Color maps: perceptually uniform and readable by the color-blind.
//!
//! batlow, lapaz and vik are by F. Crameri (Scientific colour maps, MIT license; Crameri, Shephard & Heron 2020 Nature
//! Communications 11, 5444, from memory), cividis by Nunez, Anderton & Renslow 2018 PLoS ONE 13(7), e0199239 (from memory; CC0).  Each is kept
//! as 33 of its colors, linear in between.

/// A color map.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ColorMap {
    /// Sequential.
    Batlow,
    /// Sequential, few hues.
    Lapaz,
    /// Sequential, blue to yellow.
    Cividis,
    /// Diverging, for signed fields.
    Vik,
}

impl ColorMap {
    /// Names as written in settings.
    pub const NAMES: [&str; 4] = ["batlow", "lapaz", "cividis", "vik"];

    /// Map of a name.
    pub fn of(name: &str) -> Option<Self> {
        match name {
            "batlow" => Some(Self::Batlow),
            "lapaz" => Some(Self::Lapaz),
            "cividis" => Some(Self::Cividis),
            "vik" => Some(Self::Vik),
            _ => None,
        }
    }

    /// Color at `t` from 0 to 1, lightened towards white so that lines and labels stay readable on it.
    pub fn color(self, t: f64) -> [u8; 3] {
        let table = match self {
            Self::Batlow => &BATLOW,
            Self::Lapaz => &LAPAZ,
            Self::Cividis => &CIVIDIS,
            Self::Vik => &VIK,
        };
        let at = t.clamp(0.0, 1.0) * 32.0;
        let k = (at as usize).min(31);
        let w = at - k as f64;
        std::array::from_fn(|c| {
            let value = f64::from(table[k][c]) * (1.0 - w) + f64::from(table[k + 1][c]) * w;
            (255.0 - (255.0 - value) * STRENGTH).round() as u8
        })
    }
}

/// Share of the full color that is kept: a background must not shout.
const STRENGTH: f64 = 0.72;

/// batlow.
const BATLOW: [[u8; 3]; 33] = [
    [1, 25, 89],
    [8, 37, 91],
    [13, 49, 93],
    [15, 59, 95],
    [17, 67, 96],
    [19, 75, 97],
    [23, 82, 98],
    [27, 89, 98],
    [34, 96, 97],
    [43, 101, 94],
    [53, 106, 89],
    [65, 111, 83],
    [77, 115, 77],
    [90, 119, 69],
    [103, 123, 62],
    [116, 126, 56],
    [130, 130, 49],
    [143, 134, 45],
    [159, 137, 43],
    [175, 141, 46],
    [190, 144, 53],
    [205, 146, 63],
    [219, 149, 75],
    [231, 152, 90],
    [241, 157, 107],
    [248, 162, 126],
    [252, 168, 144],
    [253, 174, 162],
    [253, 180, 180],
    [253, 186, 196],
    [252, 191, 214],
    [251, 198, 232],
    [250, 204, 250],
];

/// lapaz.
const LAPAZ: [[u8; 3]; 33] = [
    [26, 12, 100],
    [29, 23, 107],
    [32, 32, 113],
    [34, 41, 120],
    [36, 50, 126],
    [38, 58, 132],
    [40, 66, 137],
    [42, 75, 142],
    [45, 83, 147],
    [48, 91, 151],
    [51, 98, 155],
    [56, 106, 158],
    [61, 113, 160],
    [67, 121, 162],
    [75, 128, 163],
    [83, 134, 164],
    [92, 140, 163],
    [101, 145, 162],
    [111, 150, 161],
    [122, 154, 158],
    [133, 158, 156],
    [144, 161, 153],
    [155, 164, 150],
    [167, 168, 149],
    [179, 172, 150],
    [193, 178, 153],
    [208, 186, 160],
    [222, 195, 171],
    [234, 206, 185],
    [243, 216, 200],
    [249, 225, 214],
    [252, 234, 229],
    [254, 242, 243],
];

/// cividis.
const CIVIDIS: [[u8; 3]; 33] = [
    [0, 34, 78],
    [0, 40, 91],
    [0, 46, 106],
    [5, 51, 113],
    [26, 56, 111],
    [39, 62, 110],
    [50, 67, 109],
    [59, 73, 108],
    [67, 78, 108],
    [75, 84, 108],
    [83, 90, 109],
    [90, 95, 110],
    [97, 101, 111],
    [104, 106, 113],
    [111, 112, 115],
    [118, 118, 118],
    [125, 124, 120],
    [132, 130, 121],
    [140, 136, 120],
    [147, 142, 120],
    [155, 148, 118],
    [163, 154, 116],
    [171, 160, 114],
    [180, 167, 111],
    [188, 174, 108],
    [196, 180, 104],
    [205, 187, 99],
    [213, 194, 94],
    [222, 201, 88],
    [231, 209, 80],
    [240, 216, 70],
    [249, 224, 58],
    [254, 232, 56],
];

/// vik.
const VIK: [[u8; 3]; 33] = [
    [0, 18, 97],
    [2, 31, 105],
    [2, 43, 113],
    [2, 55, 121],
    [3, 68, 129],
    [5, 81, 137],
    [12, 94, 146],
    [28, 109, 156],
    [48, 125, 166],
    [72, 141, 178],
    [97, 158, 189],
    [122, 174, 200],
    [148, 190, 210],
    [173, 205, 221],
    [198, 219, 230],
    [222, 230, 233],
    [236, 229, 224],
    [238, 219, 208],
    [233, 204, 186],
    [227, 188, 165],
    [220, 172, 144],
    [214, 157, 124],
    [207, 142, 104],
    [201, 128, 86],
    [195, 114, 67],
    [189, 100, 49],
    [179, 83, 31],
    [165, 64, 15],
    [148, 47, 6],
    [131, 33, 6],
    [116, 21, 6],
    [103, 10, 7],
    [89, 0, 8],
];
