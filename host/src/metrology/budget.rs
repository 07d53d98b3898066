//! Uncertainty budgets after the GUM (JCGM 100): terms with their sensitivity, correlated where they share a cause, and kept
//! apart by whether a mean over frames makes them smaller.

use std::fmt;

/// Whether a term is the same for all values of a series.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Shared {
    /// Differs from value to value: a mean over n divides it by the root of n.
    EachItsOwn,
    /// The same for all: no mean makes it smaller.
    Common,
}

/// One term of a budget.
#[derive(Clone, Debug, PartialEq)]
pub struct Term {
    /// What it comes from.
    pub name: String,
    /// Standard uncertainty of the input, in its unit.
    pub u: f64,
    /// Unit of the input.
    pub unit: &'static str,
    /// Change of the result per change of the input.
    pub sensitivity: f64,
    /// Whether it is shared.
    pub shared: Shared,
}

impl Term {
    /// Its part in the result, signed.
    pub fn part(&self) -> f64 {
        self.sensitivity * self.u
    }
}

/// A budget: terms and the correlations between them.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Budget {
    terms: Vec<Term>,
    /// Pairs of terms and their correlation.
    correlations: Vec<(usize, usize, f64)>,
}

impl Budget {
    /// Adds a term and gives its number.
    pub fn add(&mut self, term: Term) -> usize {
        self.terms.push(term);
        self.terms.len() - 1
    }

    /// States that two terms' inputs are correlated; -1 to 1. A pair of a shared and an unshared term cannot be.
    pub fn correlate(&mut self, a: usize, b: usize, correlation: f64) {
        self.correlations.push((a, b, correlation.clamp(-1.0, 1.0)));
    }

    /// The terms.
    pub fn terms(&self) -> &[Term] {
        &self.terms
    }

    fn combined_of(&self, wanted: impl Fn(&Term) -> bool) -> f64 {
        let mut square: f64 = self.terms.iter().filter(|term| wanted(term)).map(|term| term.part() * term.part()).sum();
        for (a, b, correlation) in &self.correlations {
            if let (Some(a), Some(b)) = (self.terms.get(*a), self.terms.get(*b))
                && wanted(a)
                && wanted(b)
            {
                square += 2.0 * correlation * a.part() * b.part();
            }
        }
        libm::sqrt(square.max(0.0))
    }

    /// Combined standard uncertainty of one value.
    pub fn combined(&self) -> f64 {
        self.combined_of(|_| true)
    }

    /// The part that each value has for itself.
    pub fn own(&self) -> f64 {
        self.combined_of(|term| term.shared == Shared::EachItsOwn)
    }

    /// The part that all values share.
    pub fn common(&self) -> f64 {
        self.combined_of(|term| term.shared == Shared::Common)
    }

    /// Combined standard uncertainty of the mean of `count` values.
    pub fn of_mean(&self, count: usize) -> f64 {
        libm::hypot(self.own() / libm::sqrt(count.max(1) as f64), self.common())
    }
}

/// A table with one line per term.
impl fmt::Display for Budget {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let wide = self.terms.iter().map(|term| term.name.chars().count()).max().unwrap_or(0).max(8);
        writeln!(f, "{:<wide$}  {:>12}  {:<8}  {:>12}  {:>12}  shared", "term", "u", "unit", "sensitivity", "part")?;
        for term in &self.terms {
            let shared = if term.shared == Shared::Common { "by all" } else { "no" };
            let (u, unit, sensitivity, part) = (term.u, term.unit, term.sensitivity, term.part());
            writeln!(f, "{:<wide$}  {u:>12.6}  {unit:<8}  {sensitivity:>12.6}  {part:>12.6}  {shared}", term.name)?;
        }
        writeln!(f, "{:<wide$}  {:>50.6}", "combined", self.combined())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn term(name: &str, u: f64, sensitivity: f64, shared: Shared) -> Term {
        Term { name: name.to_owned(), u, unit: "V", sensitivity, shared }
    }

    /// JCGM 100:2008, example H.2 is too long for here; this is 5.2.2's rule: ten resistors calibrated against one standard
    /// add linearly (5.2.2, example, from memory: 10 x 0.1 ohm gives 1 ohm, not 0.32).
    #[test]
    fn fully_correlated_terms_add_linearly() {
        let mut budget = Budget::default();
        let all: Vec<usize> = (0..10).map(|_| budget.add(term("R", 0.1, 1.0, Shared::Common))).collect();
        for a in &all {
            for b in all.iter().filter(|b| *b > a) {
                budget.correlate(*a, *b, 1.0);
            }
        }
        assert!((budget.combined() - 1.0).abs() < 1e-12);
    }

    #[test]
    fn a_mean_divides_only_what_is_not_shared() {
        let mut budget = Budget::default();
        budget.add(term("noise", 0.4, 1.0, Shared::EachItsOwn));
        budget.add(term("certificate", 0.3, 1.0, Shared::Common));
        assert!((budget.combined() - 0.5).abs() < 1e-12);
        assert!((budget.of_mean(16) - libm::hypot(0.1, 0.3)).abs() < 1e-12);
        let table = budget.to_string();
        assert!(table.contains("noise") && table.contains("by all") && table.contains("0.500000"), "{table}");
    }
}
