//! Words a map description is written in: brightness units, orientation, stretch.

/// Unit of the map's brightness.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum BrightnessUnit {
    /// Jansky per beam.
    JyPerBeam,
    /// Millijansky per beam.
    MjyPerBeam,
    /// Microjansky per beam.
    UjyPerBeam,
    /// Jansky per pixel.
    JyPerPixel,
    /// Millijansky per pixel.
    MjyPerPixel,
    /// Microjansky per pixel.
    UjyPerPixel,
    /// Arbitrary: there are no fluxes.
    Arbitrary,
}

impl BrightnessUnit {
    /// From the key's word.
    pub fn from_word(word: &str) -> Option<Self> {
        Some(match word {
            "Jy/beam" => Self::JyPerBeam,
            "mJy/beam" => Self::MjyPerBeam,
            "uJy/beam" => Self::UjyPerBeam,
            "Jy/pixel" => Self::JyPerPixel,
            "mJy/pixel" => Self::MjyPerPixel,
            "uJy/pixel" => Self::UjyPerPixel,
            "none" => Self::Arbitrary,
            _ => return None,
        })
    }

    /// The key's word.
    pub const fn word(self) -> &'static str {
        match self {
            Self::JyPerBeam => "Jy/beam",
            Self::MjyPerBeam => "mJy/beam",
            Self::UjyPerBeam => "uJy/beam",
            Self::JyPerPixel => "Jy/pixel",
            Self::MjyPerPixel => "mJy/pixel",
            Self::UjyPerPixel => "uJy/pixel",
            Self::Arbitrary => "none",
        }
    }

    /// Whether it is a flux density per beam.
    pub const fn is_per_beam(self) -> bool {
        matches!(self, Self::JyPerBeam | Self::MjyPerBeam | Self::UjyPerBeam)
    }

    /// Whether it is a flux density per pixel.
    pub const fn is_per_pixel(self) -> bool {
        matches!(self, Self::JyPerPixel | Self::MjyPerPixel | Self::UjyPerPixel)
    }

    /// Millijansky (per beam or pixel) in one unit; `None` where it is arbitrary.
    pub const fn mjy_factor(self) -> Option<f64> {
        match self {
            Self::JyPerBeam | Self::JyPerPixel => Some(1e3),
            Self::MjyPerBeam | Self::MjyPerPixel => Some(1.0),
            Self::UjyPerBeam | Self::UjyPerPixel => Some(1e-3),
            Self::Arbitrary => None,
        }
    }
}

/// Order of the rows as stored.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Rows {
    /// The first row stored is the bottom one as displayed.
    BottomUp,
    /// The first row stored is the top one as displayed.
    TopDown,
}

impl Rows {
    /// The key's word.
    pub const fn word(self) -> &'static str {
        match self {
            Self::BottomUp => "bottom-up",
            Self::TopDown => "top-down",
        }
    }
}

/// Handedness of the map as displayed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum East {
    /// Position angles grow counter-clockwise: the sky as it is seen.
    #[default]
    Left,
    /// Position angles grow clockwise: mirrored.
    Right,
}

impl East {
    /// The key's word.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Left => "left",
            Self::Right => "right",
        }
    }
}

/// How the stored values were stretched.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum ValueTransfer {
    /// Not at all.
    #[default]
    Linear,
    /// Square root; a negative stored value is taken as minus the root of the size.
    Sqrt,
    /// Decimal logarithm.
    Log10,
}

impl ValueTransfer {
    /// The key's word.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Linear => "linear",
            Self::Sqrt => "sqrt",
            Self::Log10 => "log10",
        }
    }

    /// Undoes the stretch.
    pub fn undo(self, stored: f64) -> f64 {
        match self {
            Self::Linear => stored,
            Self::Sqrt => stored * stored.abs(),
            Self::Log10 => libm::exp10(stored),
        }
    }
}
