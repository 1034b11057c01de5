//! Reading `[[step]]`: its values, its order, its approach.

use super::super::{Approach, Order, RangeText, Spacing, Step, StepKind, Track, Values};
use super::{MOST_COUNT, settle};
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{Findings, Table, fault};

/// Order as written, before its seed is known.
#[derive(Clone, Copy, PartialEq)]
enum Word {
    Listed,
    Rising,
    Falling,
    Serpentine,
    ThereAndBack,
    Shuffled,
}

pub(super) fn step(mut table: Table<'_>, findings: &mut Findings) -> Option<Step> {
    let span = table.span.clone();
    if table.has("every") || table.has("for") {
        let every = table.required("every", findings);
        let duration = table.required("for", findings);
        table.finish(findings);
        return Some(Step {
            span,
            kind: StepKind::Time {
                every: every?,
                duration: duration?,
            },
        });
    }
    // Asked for, so that a misspelt `every` finds its suggestion.
    let _ = (table.text("every", findings), table.text("for", findings));
    let order_span = table.place("order");
    let order = order(&mut table, findings);
    let first = track(&mut table, None, findings);
    let count = first.as_ref().and_then(single_count);
    let mut tracks: Vec<Option<Track>> = vec![first];
    for mut inner in table.tables("together", findings) {
        tracks.push(track(&mut inner, count, findings));
        inner.finish(findings);
    }
    table.finish(findings);
    let tracks = tracks.into_iter().collect::<Option<Vec<_>>>()?;
    let order = order?;
    if let (Order::Serpentine | Order::ThereAndBack, Some(track)) =
        (order, tracks.iter().find(|t| t.approach.is_some()))
    {
        let message = format!(
            "`{}` comes to every value from one side, but a {} order comes from both",
            track.quantity.text,
            if order == Order::Serpentine {
                "serpentine"
            } else {
                "there-and-back"
            }
        );
        let place = track
            .approach
            .as_ref()
            .map_or(span.clone(), |a| a.span.clone());
        findings.push(
            Diagnostic::error("D0405", FileRole::Sequence, message)
                .at(place)
                .help("drop `approach`, or choose rising, falling or shuffled"),
        );
    }
    Some(Step {
        span,
        kind: StepKind::Quantities {
            tracks,
            order,
            order_span,
        },
    })
}

fn order(table: &mut Table<'_>, findings: &mut Findings) -> Option<Order> {
    let seed = table.whole("seed", (0, u64::MAX), findings);
    let words = [
        ("listed", Word::Listed),
        ("rising", Word::Rising),
        ("falling", Word::Falling),
        ("serpentine", Word::Serpentine),
        ("there-and-back", Word::ThereAndBack),
        ("shuffled", Word::Shuffled),
    ];
    let Some(text) = table.text("order", findings) else {
        return (!table.has("order")).then_some(Order::Listed);
    };
    let order = match findings.choice(&text, &words)? {
        Word::Listed => Order::Listed,
        Word::Rising => Order::Rising,
        Word::Falling => Order::Falling,
        Word::Serpentine => Order::Serpentine,
        Word::ThereAndBack => Order::ThereAndBack,
        Word::Shuffled => match seed {
            Some(seed) => Order::Shuffled { seed: seed.value },
            None => {
                if !table.has("seed") {
                    let message = "a shuffled order has no `seed`: it could not be repeated";
                    findings.push(
                        fault("D0105", &text, message).help("add seed = 1, or any whole number"),
                    );
                }
                return None;
            }
        },
    };
    Some(order)
}

/// One quantity with its values. `count` is the leading track's, for tracks that state none.
fn track(table: &mut Table<'_>, count: Option<u64>, findings: &mut Findings) -> Option<Track> {
    let quantity = table.required("quantity", findings);
    let values = values(table, count, findings);
    let approach = approach(table, findings);
    let settle = settle(table, findings);
    Some(Track {
        quantity: quantity?,
        values: values?,
        approach,
        settle,
    })
}

fn single_count(track: &Track) -> Option<u64> {
    match &track.values {
        Values::List(list) => Some(list.len() as u64),
        Values::Ranges(ranges) => ranges.iter().map(|r| r.count).reduce(u64::saturating_add),
    }
}

fn values(table: &mut Table<'_>, count: Option<u64>, findings: &mut Findings) -> Option<Values> {
    let ranged = ["from", "to", "count", "spacing"]
        .iter()
        .any(|key| table.has(key));
    let forms = [ranged, table.has("values"), table.has("ranges")];
    if forms.iter().filter(|given| **given).count() != 1 {
        let message = match forms {
            [false, false, false] => "the step has no values",
            _ => "the step has its values twice",
        };
        let _ = (
            table.texts("values", findings),
            table.tables("ranges", findings),
        );
        let _ = range(table, count, true, findings);
        findings.push(
            Diagnostic::error("D0404", table.file, message)
                .at(table.span.clone())
                .help("give either from, to and count, or values = [...], or ranges = [{ from, to, count }, ...]"),
        );
        return None;
    }
    let list = table.texts("values", findings);
    let tables = table.tables("ranges", findings);
    if ranged {
        let range = range(table, count, false, findings)?;
        return Some(Values::Ranges(vec![range]));
    }
    let _ = range(table, count, true, findings);
    if let Some(list) = list {
        return Some(Values::List(list));
    }
    let mut ranges = Vec::new();
    for mut inner in tables {
        let read = range(&mut inner, None, false, findings);
        inner.finish(findings);
        ranges.push(read?);
    }
    (!ranges.is_empty()).then_some(Values::Ranges(ranges))
}

/// `optional`: only asks for the keys, so that they are known.
fn range(
    table: &mut Table<'_>,
    count: Option<u64>,
    optional: bool,
    findings: &mut Findings,
) -> Option<RangeText> {
    let spacings = [("linear", Spacing::Linear), ("log", Spacing::Log)];
    let (from, to) = if optional {
        (table.text("from", findings), table.text("to", findings))
    } else {
        (
            table.required("from", findings),
            table.required("to", findings),
        )
    };
    let stated = table.whole("count", (1, MOST_COUNT), findings);
    let missing = !table.has("count") && count.is_none();
    if missing && !optional {
        table.missing("count", findings);
    }
    let spacing = table.text("spacing", findings);
    let spacing = match spacing {
        Some(text) => findings.choice(&text, &spacings)?,
        None => Spacing::Linear,
    };
    let stated = stated.map(|w| w.value);
    Some(RangeText {
        from: from?,
        to: to?,
        count: if table.has("count") { stated? } else { count? },
        spacing,
        span: table.span.clone(),
    })
}

fn approach(table: &mut Table<'_>, findings: &mut Findings) -> Option<Approach> {
    let mut inner = table.table("approach", findings)?;
    let side = inner.required("from", findings);
    let below = side.and_then(|text| findings.choice(&text, &[("below", true), ("above", false)]));
    let by = inner.required("by", findings);
    let span = inner.span.clone();
    inner.finish(findings);
    Some(Approach {
        below: below?,
        by: by?,
        span,
    })
}
