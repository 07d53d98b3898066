//! Sections that other parts of the program add: words, plots and pictures that travel within the page.

use super::html;

/// A picture, shown from within the page.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Picture {
    /// The PNG file's bytes.
    pub png: Vec<u8>,
    /// What it shows, for those who do not see it.
    pub alt: String,
    /// What stands below it.
    pub caption: String,
}

/// A further section.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct ExtraSection {
    /// Its anchor: lower-case letters and hyphens.
    pub id: &'static str,
    /// Its heading.
    pub heading: String,
    /// HTML of its own; whoever makes it has escaped what came from files.
    pub html: String,
    /// Pictures behind it.
    pub pictures: Vec<Picture>,
}

pub(super) fn section(section: &ExtraSection) -> String {
    let pictures: String = section.pictures.iter().map(figure).collect();
    html::section(section.id, &section.heading, &format!("{}<div class=\"pictures\">{pictures}</div>", section.html))
}

fn figure(picture: &Picture) -> String {
    format!(
        "<figure><img src=\"data:image/png;base64,{}\" alt=\"{}\"><figcaption>{}</figcaption></figure>",
        base64(&picture.png),
        html::escape(&picture.alt),
        html::escape(&picture.caption)
    )
}

/// RFC 4648, section 4. Twenty lines are less than another dependency.
fn base64(bytes: &[u8]) -> String {
    const DIGITS: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut text = String::with_capacity(bytes.len().div_ceil(3) * 4);
    for group in bytes.chunks(3) {
        let at = |index: usize| u32::from(group.get(index).copied().unwrap_or(0));
        let bits = at(0) << 16 | at(1) << 8 | at(2);
        for digit in 0..4 {
            if digit <= group.len() {
                text.push(char::from(DIGITS[(bits >> (18 - 6 * digit) & 63) as usize]));
            } else {
                text.push('=');
            }
        }
    }
    text
}

#[cfg(test)]
mod tests {
    #[test]
    fn base64_of_rfc_4648_section_10() {
        let cases =
            [("", ""), ("f", "Zg=="), ("fo", "Zm8="), ("foo", "Zm9v"), ("foob", "Zm9vYg=="), ("foobar", "Zm9vYmFy")];
        for (plain, coded) in cases {
            assert_eq!(super::base64(plain.as_bytes()), coded);
        }
    }
}
