//! Reads a unit: symbols with powers, multiplied and divided.

use super::symbols::{Powers, symbol};

/// Longest unit read \[characters\]; a longer one is no unit.
const LONGEST: usize = 64;
/// Largest power read.
const HIGHEST: i32 = 9;
/// Deepest nesting of parentheses read.
const DEEPEST: usize = 4;

/// A unit as a factor to SI and powers of the base units.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Product {
    pub(super) factor: f64,
    pub(super) powers: Powers,
}

impl Product {
    const ONE: Self = Self {
        factor: 1.0,
        powers: [0; 4],
    };

    fn times(mut self, other: Self, power: i32) -> Self {
        self.factor *= other.factor.powi(power);
        for (mine, its) in self.powers.iter_mut().zip(other.powers) {
            *mine += its * power;
        }
        self
    }
}

/// Why a unit cannot be read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum ExpressionError {
    /// A word that is no symbol.
    Unknown(String),
    /// Words that are symbols, joined in a way that means nothing.
    Shape,
}

/// Reads a unit such as `m3/(Pa s m)`, `/Pa`, `kg m-3`, `ft²/d`. A division takes the next factor only.
pub(super) fn product(text: &str) -> Result<Product, ExpressionError> {
    if text.chars().count() > LONGEST {
        return Err(ExpressionError::Shape);
    }
    let plain: Vec<char> = text.chars().map(plain).collect();
    let mut rest = plain.as_slice();
    let whole = factors(&mut rest, 0)?;
    if rest.is_empty() {
        Ok(whole)
    } else {
        Err(ExpressionError::Shape)
    }
}

/// Superscripts, dots and micro signs in their plain spelling.
fn plain(c: char) -> char {
    match c {
        '²' => '2',
        '³' => '3',
        '¹' => '1',
        '⁻' | '−' => '-',
        '·' | '⋅' | '*' | '\u{a0}' | '\u{202f}' => ' ',
        'µ' | 'μ' => 'u',
        other => other,
    }
}

/// A run of factors up to a closing parenthesis or the end.
fn factors(rest: &mut &[char], depth: usize) -> Result<Product, ExpressionError> {
    let mut whole = Product::ONE;
    let mut sign = 1;
    let mut any = false;
    loop {
        match *rest {
            [] | [')', ..] => break,
            [' ' | '\t', tail @ ..] => *rest = tail,
            ['/', tail @ ..] if sign == 1 => {
                *rest = tail;
                sign = -1;
            }
            ['(', tail @ ..] if depth < DEEPEST => {
                *rest = tail;
                let inner = factors(rest, depth + 1)?;
                let [')', tail @ ..] = *rest else {
                    return Err(ExpressionError::Shape);
                };
                *rest = tail;
                whole = whole.times(inner, sign * power(rest)?);
                (sign, any) = (1, true);
            }
            // `1/Pa`
            ['1', tail @ ..] if !any && sign == 1 => {
                *rest = tail;
                any = true;
            }
            _ => {
                let (one, power) = factor(rest)?;
                whole = whole.times(one, sign * power);
                (sign, any) = (1, true);
            }
        }
    }
    if any && sign == 1 {
        Ok(whole)
    } else {
        Err(ExpressionError::Shape)
    }
}

/// One symbol with its power. Symbols that hold digits (`H2O`) win over a power.
fn factor(rest: &mut &[char]) -> Result<(Product, i32), ExpressionError> {
    let word_end = |c: &char| !(c.is_alphanumeric() || *c == '%');
    let end = rest.iter().position(word_end).unwrap_or(rest.len());
    let (run, tail) = rest.split_at(end);
    let word: String = run.iter().collect();
    let name = word.trim_end_matches(|c: char| c.is_ascii_digit());
    if name.is_empty() {
        return Err(ExpressionError::Shape);
    }
    if let Some(found) = symbol(&word) {
        *rest = tail;
        let one = Product {
            factor: found.factor,
            powers: found.powers,
        };
        return Ok((one, power(rest)?));
    }
    let found = symbol(name).ok_or_else(|| ExpressionError::Unknown(word.clone()))?;
    let digits = word.strip_prefix(name).unwrap_or_default();
    *rest = tail;
    let one = Product {
        factor: found.factor,
        powers: found.powers,
    };
    Ok((one, bounded(digits)?))
}

/// A power written after a symbol or a parenthesis: `^3`, `^-1`, `-1`, `2`, or none.
fn power(rest: &mut &[char]) -> Result<i32, ExpressionError> {
    let mut here = *rest;
    let caret = matches!(here, ['^', ..]);
    if let ['^', tail @ ..] = here {
        here = tail;
    }
    let negative = matches!(here, ['-', ..]);
    if let ['-', tail @ ..] = here {
        here = tail;
    }
    let end = here
        .iter()
        .position(|c| !c.is_ascii_digit())
        .unwrap_or(here.len());
    let (digits, tail) = here.split_at(end);
    if digits.is_empty() {
        return if caret || negative {
            Err(ExpressionError::Shape)
        } else {
            Ok(1)
        };
    }
    *rest = tail;
    let size = bounded(&digits.iter().collect::<String>())?;
    Ok(if negative { -size } else { size })
}

/// A power from 1 to [`HIGHEST`].
fn bounded(digits: &str) -> Result<i32, ExpressionError> {
    digits
        .parse()
        .ok()
        .filter(|p| (1..=HIGHEST).contains(p))
        .ok_or(ExpressionError::Shape)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn powers(text: &str) -> Powers {
        product(text).unwrap().powers
    }

    #[test]
    fn divisions_take_the_next_factor_and_parentheses_group() {
        assert_eq!(powers("m3/(Pa s m)"), [3, -1, 1, 0]);
        assert_eq!(powers("m3/Pa/s/m"), [3, -1, 1, 0]);
        assert_eq!(powers("m3 Pa-1 s^-1 m⁻¹"), [3, -1, 1, 0]);
        assert_eq!(powers("/Pa"), powers("1/Pa"));
        assert_eq!(powers("m H2O"), powers("Pa"));
        assert_eq!(powers("ft²/d"), powers("ft2/d"));
        assert_eq!(powers("mPa·s"), powers("cP"));
        assert_eq!(powers("(m/s)2"), [2, 0, -2, 0]);
    }

    #[test]
    fn what_means_nothing_is_refused() {
        for text in [
            "",
            " ",
            "/",
            "m/",
            "m//s",
            "(m",
            "m)",
            "()",
            "m^",
            "m0",
            "m99",
            "3",
            "m-",
            "((((((m))))))",
        ] {
            assert_eq!(product(text), Err(ExpressionError::Shape), "{text}");
        }
        assert_eq!(
            product("bbl/dy"),
            Err(ExpressionError::Unknown("dy".to_owned()))
        );
        assert!(product(&"m ".repeat(100)).is_err());
    }
}
