//! Charts as SVG, drawn by us: sharp in light and dark, with units, readable without colour, with a title and a
//! description for those who don't see them. The same drawing serves the page, the report and `--format svg`.

mod day_band;
mod scale;
mod svg;
mod two_scale;

pub use day_band::day_band_svg;
pub use svg::escape;
pub use two_scale::{BandPoint, RailScale, TwoScale, mains_range};
