//! How results are said and drawn: one place for each result, used alike by the command line, the page and the
//! notices, so that they never tell different stories. Pure: it is given figures and a time zone and returns text.

mod notice;
mod when;

pub use notice::{CAUTION, NoticeText, notice_text};
pub use when::{local_time, rfc3339};
