//! What an outside method is given: `problem.dat-s` and `problem.json`.

use std::io;
use std::path::Path;

use serde_json::json;

use super::PROTOCOL;
use crate::formats::sdpa;
use crate::methods::Trial;
use crate::problem::Problem;

/// Name of the file with the problem's data.
pub const PROBLEM: &str = "problem.dat-s";

/// Name of the file with everything else.
pub const TASK: &str = "problem.json";

/// Name of the file that the program writes.
pub const ANSWER: &str = "answer.json";

/// Writes both files into `room`.
///
/// # Errors
/// The system refuses.
pub(super) fn write(room: &Path, problem: &Problem, trial: &mut Trial) -> io::Result<()> {
    sdpa::save(&room.join(PROBLEM), problem, "minimise <C, X>; matrix 0 is -C")?;
    let budget = trial.meter.budget();
    let (wall_s, memory_bytes) = (budget.wall.as_secs_f64(), budget.memory);
    let blocks: Vec<_> = problem
        .blocks()
        .iter()
        .enumerate()
        .map(|(at, block)| {
            json!({"name": format!("block-{}", at + 1), "order": block.order, "rank": block.rank})
        })
        .collect();
    let task = json!({
        "protocol": PROTOCOL,
        "problem": PROBLEM,
        "answer": ANSWER,
        "blocks": blocks,
        "nonnegative": problem.orthant(),
        "constraints": problem.constraints().len(),
        // Below 2^53, so that every language reads it exactly.
        "seed": trial.stream.bits() >> 11,
        "wall_s": wall_s,
        "memory_bytes": memory_bytes,
    });
    std::fs::write(room.join(TASK), format!("{task:#}\n"))
}

/// Returns the JSON Schemas of `problem.json` and `answer.json`, as one document with both under
/// `$defs`.
pub fn schema() -> serde_json::Value {
    let count = json!({"type": "integer", "minimum": 0});
    let counted = json!({"type": ["integer", "null"], "minimum": 0});
    let numbers = json!({"type": "array", "items": {"type": "number"}});
    let rows = json!({"type": "array", "items": numbers});
    let one = |name: &str, holds: serde_json::Value| {
        json!({"type": "object", "properties": {name: holds}, "required": [name],
               "additionalProperties": false})
    };
    json!({
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": format!("rankassay outside methods, protocol {PROTOCOL}"),
        "$defs": {
            "problem": {
                "type": "object",
                "required": ["protocol", "problem", "answer", "blocks", "nonnegative", "constraints",
                             "seed", "wall_s", "memory_bytes"],
                "properties": {
                    "protocol": {"const": PROTOCOL},
                    "problem": {"type": "string"},
                    "answer": {"type": "string"},
                    "blocks": {"type": "array", "items": {
                        "type": "object",
                        "required": ["name", "order", "rank"],
                        "properties": {
                            "name": {"type": "string"},
                            "order": {"type": "integer", "minimum": 1},
                            "rank": {"type": ["integer", "null"], "minimum": 1},
                        },
                    }},
                    "nonnegative": count,
                    "constraints": count,
                    "seed": count,
                    "wall_s": {"type": "number"},
                    "memory_bytes": {"type": ["integer", "null"]},
                },
            },
            "answer": {
                "type": "object",
                "required": ["version", "blocks"],
                "additionalProperties": false,
                "properties": {
                    "version": {"const": crate::formats::solution::VERSION},
                    "blocks": {"type": "array", "items": {"oneOf": [
                        one("factor", rows.clone()),
                        one("matrix", rows),
                        one("entries", json!({"type": "array", "items": {
                            "type": "array", "prefixItems": [
                                {"type": "integer", "minimum": 1},
                                {"type": "integer", "minimum": 1},
                                {"type": "number"}],
                            "minItems": 3, "maxItems": 3}})),
                        {"type": "object", "required": ["file", "holds"], "additionalProperties": false,
                         "properties": {"file": {"type": "string", "pattern": r"^[^/\\]+$",
                                                 "not": {"enum": [".", ".."]}},
                                        "holds": {"enum": ["factor", "matrix"]}}},
                    ]}},
                    "nonnegative": numbers,
                    "multipliers": {"oneOf": [numbers, {"type": "null"}]},
                    "stop": {"enum": ["converged", "iteration-limit", "stalled", "time-limit",
                                       "memory-limit", "primal-infeasible", "dual-infeasible", null]},
                    "note": {"type": "string"},
                    "effort": {"type": "object", "additionalProperties": false, "properties": {
                        "flops": counted, "eigendecompositions": counted, "factorisations": counted,
                        "operator_products": counted, "inner_steps": counted}},
                },
            },
        },
    })
}
