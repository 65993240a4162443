//! `hidden-partition`: a sign vector in the null space of a few whole columns, like number partitioning.
//!
//! With t a sign vector and W (n x q) whole with W't = 0, C = W W' and X_ii = 1: `<C, X> >= 0 = <C, tt'>`, so tt' is
//! optimal with y = 0, S = C. Finding a rank-one optimum is to split the rows of W into two parts of equal sum;
//! one column is number partitioning.
//!
//! The optima of the relaxation are all X of unit diagonal with W'X = 0. They include one of higher rank unless some
//! combination of the columns has few negative entries: if tt' were the only optimum then, with N a basis of
//! null(W'), n - q >= 2, the set {U PSD, (N U N')_ii = 1} would have no positive definite point, so by facial
//! reduction (J. Borwein, H. Wolkowicz, Journal of the Australian Mathematical Society A 30:369-380, 1981, from memory)
//! there is y with sum y_i = 0 and N'Diag(y)N PSD and not zero. Then t'Diag(y)t = 0 gives N'Diag(y)t = 0, that is
//! y_i = t_i (W a)_i for some a != 0; and Diag(y), being PSD on a space of codimension q, has at most q negative
//! entries. So if every t * (W a), a != 0, has more than q negative entries, the face holds points of higher rank. For
//! one column this is checked (two entries of each sign in t * w; drawn again otherwise). For more columns it is what
//! random columns with q well below n/2 do, but it is not checked, and the certificate claims nothing of it.

use super::assembly::{PairDraft, column, unit_diagonal};
use super::balance::balanced;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `hidden-partition`.
#[derive(Clone, Copy, Debug)]
pub struct HiddenPartition;

static CARD: FamilyCard = FamilyCard {
    id: "hidden-partition",
    title: "Hidden sign vector that balances whole columns, like number partitioning",
    formula: "min <WW',X> s.t. X_ii = 1, X PSD, rank X <= 1",
    construction: "hidden signs t; each column of W is drawn from {-weight..weight}^n and moved by unit steps at \
        random entries, within that range, until w't = 0; C = WW'",
    optimum: "0, attained by tt' (and by every sign vector that balances all columns)",
    relaxation: Relaxation::Face,
    certificate: "dual pair, exact: S = WW', y = 0; that the face has higher rank is proved for columns = 1 only",
    source: "after the Wishart planted ensemble, F. Hamze, J. Raymond, C. Pattison, K. Biswas, H. Katzgraber, \
        Physical Review E 101:052102, 2020 (citation from memory), in whole numbers",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 6, most: 500 },
            default: DefaultSetting::Integer(20),
            meaning: "Number n of signs.",
        },
        SettingSpec {
            name: "columns",
            kind: Kind::Integer { least: 1, most: 498 },
            default: DefaultSetting::Integer(4),
            meaning: "Number q of columns of W, at most n - 2. The relaxation's optima reach rank n - q at most; \
                more columns leave fewer solutions.",
        },
        SettingSpec {
            name: "weight",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(10),
            meaning: "Entries of W are at most this in modulus; larger ones leave fewer solutions.",
        },
    ],
};

impl Family for HiddenPartition {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let (order, columns) = (parameters.size("order"), parameters.size("columns"));
        if columns + 2 > order {
            return Err(PlantError::Parameters(format!(
                "columns = {columns} leave no face for order = {order}; the nearest possible value is {}",
                order - 2
            )));
        }
        let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
        let mut slack = Vec::with_capacity(columns);
        while slack.len() < columns {
            let drawn = balanced(stream, &signs, parameters.integer("weight"));
            let keep = match columns {
                1 => has_both_signs(&drawn, &signs),
                _ => drawn.iter().any(|value| *value != 0),
            };
            if keep {
                let entries = drawn.into_iter().enumerate().filter(|entry| entry.1 != 0);
                slack.push(column(entries.collect()));
            }
        }
        PairDraft {
            rank: 1,
            factor: IntegerFactor { order, width: 1, rows: signs },
            weights: vec![1; columns],
            slack,
            constraints: unit_diagonal(order),
            multipliers: vec![0; order],
        }
        .plant()
    }
}

/// Returns whether t * w has two entries of each sign.
fn has_both_signs(column: &[i64], signs: &[i64]) -> bool {
    let count = |sign: i64| column.iter().zip(signs).filter(|(w, t)| *w * *t * sign > 0).count();
    count(1) >= 2 && count(-1) >= 2
}
