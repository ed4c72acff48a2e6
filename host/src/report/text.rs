//! The report for a terminal: plain text of at most 100 columns, readable without colour.
//!
//! One function per panel; numbers become text in [`super::figures`]. Colour repeats what words say
//! and is the caller's choice ([`Style`]).

use super::Report;
use super::Verdict;

mod findings;
pub(crate) mod layout;
mod panels;
mod spectra;

/// Whether the text may carry terminal colours.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Style {
    /// Emit colour sequences: for a terminal, and only where the user did not say NO_COLOR.
    pub has_colour: bool,
}

impl Style {
    /// No colour at all.
    pub const PLAIN: Self = Self { has_colour: false };
    /// With colour.
    pub const COLOURED: Self = Self { has_colour: true };

    /// `text`, coloured by an SGR code (ECMA-48) if colour is on.
    fn paint(self, code: &str, text: &str) -> String {
        if self.has_colour { format!("\u{1b}[{code}m{text}\u{1b}[0m") } else { text.to_string() }
    }

    pub(crate) fn strong(self, text: &str) -> String {
        self.paint("1", text)
    }

    fn verdict(self, verdict: Verdict) -> String {
        let code = match verdict {
            Verdict::Within => "1;32",
            Verdict::Marginal => "1;33",
            Verdict::Outside => "1;31",
            Verdict::CannotJudge => "1;35",
        };
        self.paint(code, verdict_words(verdict))
    }
}

/// The verdict as the report's first line says it.
pub const fn verdict_words(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Within => "WITHIN LIMITS",
        Verdict::Marginal => "MARGINAL",
        Verdict::Outside => "OUTSIDE LIMITS",
        Verdict::CannotJudge => "CANNOT JUDGE",
    }
}

/// The first lines of the report alone: verdict, reason, worst moment.
pub fn headline(report: &Report, style: Style) -> String {
    panels::verdict(report, style)
}

/// The whole report as text, with a newline at its end.
pub fn render(report: &Report, style: Style) -> String {
    let mut text = panels::verdict(report, style);
    let sections: [(&str, String); 8] = [
        ("Examined", panels::examined(report)),
        ("Limits", panels::limits(report)),
        ("Margins", panels::margins(report)),
        ("Excursions", findings::excursions(report)),
        ("Levels", findings::levels(report)),
        ("Sources in the spectrum", spectra::sources(report)),
        ("What could not be seen", findings::blind(report)),
        ("Before acting on this", findings::cautions(report)),
    ];
    for (title, body) in sections {
        text.push('\n');
        text.push_str(&style.strong(&layout::heading(title)));
        text.push('\n');
        text.push_str(&body);
    }
    text
}

#[cfg(test)]
mod tests;
