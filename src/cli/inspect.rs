//! `rankassay inspect`.

use std::path::PathBuf;

use clap::Args;
use serde_json::json;

use super::Ended;
use super::output::say_and_end;
use crate::linalg::vector::norm2;
use crate::problem::{Coefficient, Functional, Problem};
use crate::runner::read_instance;

#[derive(Debug, Args)]
pub(super) struct Inspect {
    /// Instance file: native, sparse SDPA (.dat-s) or tables of a power network (.toml)
    instance: PathBuf,
    /// Puts this rank bound on every block
    #[arg(long, value_name = "R", value_parser = clap::value_parser!(u32).range(1..))]
    rank: Option<u32>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

/// How the data of a problem are stored.
struct Storage {
    entries: usize,
    outer_products: usize,
    rank_one: usize,
}

fn storage(problem: &Problem) -> Storage {
    let mut storage = Storage { entries: 0, outer_products: 0, rank_one: 0 };
    let mut add = |functional: &Functional| {
        storage.entries += functional.orthant.len();
        for (_, part) in &functional.parts {
            match part {
                Coefficient::Sparse(matrix) => storage.entries += matrix.stored(),
                Coefficient::Outer(sum) => {
                    storage.outer_products += sum.terms.len();
                    storage.entries +=
                        sum.terms.iter().map(|term| term.vector.len()).sum::<usize>();
                    storage.rank_one += usize::from(sum.terms.len() == 1);
                }
            }
        }
    };
    add(problem.cost());
    problem.constraints().iter().for_each(add);
    storage
}

/// Norms that the referee's relative figures and an engine's scaling refer to.
struct Norms {
    rhs: f64,
    cost: f64,
    /// Least and largest over the constraints; none without constraints.
    constraints: Option<(f64, f64)>,
}

fn norms(problem: &Problem) -> Norms {
    let constraints = problem.constraints().iter().map(Functional::norm);
    Norms {
        rhs: norm2(problem.rhs()),
        cost: problem.cost().norm(),
        constraints: constraints
            .map(|norm| (norm, norm))
            .reduce(|a, b| (a.0.min(b.0), a.1.max(b.1))),
    }
}

pub(super) fn execute(command: &Inspect) -> Ended {
    let mut instance = read_instance(&command.instance)?;
    let file = command.instance.display().to_string();
    if let Some(rank) = command.rank {
        instance = instance.with_rank(rank as usize, &file)?;
    }
    let (problem, record) = (&instance.problem, &instance.record);
    let storage = storage(problem);
    let norms = norms(problem);
    let blocks: Vec<String> = problem
        .blocks()
        .iter()
        .map(|block| match block.rank {
            Some(rank) => format!("{} (rank <= {rank})", block.order),
            None => format!("{} (rank free)", block.order),
        })
        .collect();
    // An entry of an upper triangle or of a diagonal, out of all such places of all functionals.
    let triangle: f64 =
        problem.blocks().iter().map(|b| b.order as f64 * (b.order as f64 + 1.0) / 2.0).sum();
    let places = (triangle + problem.orthant() as f64) * (1.0 + problem.constraints().len() as f64);
    let density = storage.entries as f64 / places;
    if command.json {
        let value = json!({
            "file": file,
            "blocks": problem.blocks().iter().map(|b| json!({"order": b.order, "rank": b.rank})).collect::<Vec<_>>(),
            "nonnegative": problem.orthant(),
            "order": problem.total_order(),
            "constraints": problem.constraints().len(),
            "stored_numbers": storage.entries,
            "density": density,
            "outer_products": storage.outer_products,
            "norm_rhs": norms.rhs,
            "norm_cost": norms.cost,
            "norm_constraint_least": norms.constraints.map(|(least, _)| least),
            "norm_constraint_largest": norms.constraints.map(|(_, largest)| largest),
            "rank_bound": record.rank_bound,
            "target_rank": record.target_rank,
            "optimum": record.optimum,
            "optimum_known": record.optimum_known,
            "certificate": record.certificate,
            "uniqueness": record.uniqueness,
            "digest": record.digest,
        });
        let text = serde_json::to_string_pretty(&value).expect("the facts are plain data");
        return say_and_end(&format!("{text}\n"));
    }
    let optimum = record
        .optimum
        .map_or("unknown".to_owned(), |value| format!("{value:?} ({})", record.optimum_known));
    let certificate = match record.certificate.as_str() {
        "none" => "none".to_owned(),
        "no-proof" => "no-proof: a planted point, feasible; that it is optimal is not proved".to_owned(),
        "verified-pair" => {
            "verified-pair, checked and holds (the slack proved PSD in floating point with a bound of the error)".to_owned()
        }
        kind => format!("{kind}, checked and holds"),
    };
    let facts = [
        ("file", file),
        ("PSD blocks", format!("{}: {}", blocks.len(), shortened(&blocks))),
        ("nonnegative scalars", problem.orthant().to_string()),
        ("constraints", problem.constraints().len().to_string()),
        ("stored numbers", format!("{} ({:.2e} of all places)", storage.entries, density)),
        (
            "outer products",
            format!("{} ({} functionals of rank one)", storage.outer_products, storage.rank_one),
        ),
        ("norm of b", format!("{:.4e}", norms.rhs)),
        ("norm of C", format!("{:.4e} (Frobenius)", norms.cost)),
        (
            "norms of A_i",
            norms.constraints.map_or("none".to_owned(), |(least, largest)| {
                format!("{least:.4e} to {largest:.4e} (Frobenius)")
            }),
        ),
        ("rank bound", format!("{} (largest r with r(r+1)/2 <= constraints)", record.rank_bound)),
        ("optimum", optimum),
        ("certificate", certificate),
        ("uniqueness", record.uniqueness.clone()),
        ("digest", record.digest.clone()),
    ];
    let lines: Vec<String> =
        facts.iter().map(|(name, text)| format!("{name:<20} {text}\n")).collect();
    say_and_end(&lines.concat())
}

/// Lists the first blocks and says how many are left out.
fn shortened(blocks: &[String]) -> String {
    const SHOWN: usize = 8;
    let mut text = blocks.iter().take(SHOWN).cloned().collect::<Vec<_>>().join(", ");
    if blocks.len() > SHOWN {
        text += &format!(", and {} more", blocks.len() - SHOWN);
    }
    text
}
