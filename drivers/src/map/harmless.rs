//! What a map may not say when a link is made or left: anything that changes what the bench does.

use super::CommandMap;

/// Whether a message unit would reset or set something; in words.
pub(super) fn forbidden(unit: &str, map: &CommandMap) -> Option<String> {
    let header = unit.trim().split(' ').next()?;
    if header.ends_with('?') {
        return None;
    }
    let nodes = nodes_of(header);
    if ["*RST", "*RCL", "*TRG", "*DDT"]
        .iter()
        .any(|c| header.eq_ignore_ascii_case(c))
    {
        return Some("changes settings".to_owned());
    }
    if nodes.first().is_some_and(|node| same(node, "OUTPUT"))
        || nodes.last().is_some_and(|node| same(node, "PRESET"))
    {
        return Some("changes settings".to_owned());
    }
    map.quantities.iter().find_map(|(property, entry)| {
        let theirs = nodes_of(entry.say.as_ref()?.header());
        // Optional nodes in between make headers of one command differ; their first and last do not.
        let alike = same(nodes.first()?, theirs.first()?)
            && theirs
                .iter()
                .skip(1)
                .all(|node| nodes.iter().any(|mine| same(mine, node)));
        alike.then(|| format!("sets {property}"))
    })
}

/// The mnemonics of a header without the leading, optional `SOURce`.
fn nodes_of(header: &str) -> Vec<String> {
    let all = header.trim_start_matches(':').split(':');
    all.map(|node| {
        node.trim_end_matches(|c: char| c.is_ascii_digit())
            .to_ascii_uppercase()
    })
    .filter(|node| !same(node, "SOURCE"))
    .collect()
}

/// Whether two mnemonics are one in its long or short form.
fn same(a: &str, b: &str) -> bool {
    let shorter = a.len().min(b.len());
    a == b || (shorter >= 3 && (a.starts_with(b) || b.starts_with(a)))
}
