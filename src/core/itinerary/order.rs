//! In which order the values of a step are visited, computed from the index alone.

use crate::sequence::Order;

/// Number of places along a step of `values` values.
pub(super) fn places(order: Order, values: u64) -> u64 {
    match order {
        Order::ThereAndBack => values.saturating_mul(2).saturating_sub(1),
        _ => values,
    }
}

/// The place visited as number `visit` of the pass number `pass`, both from 0.
///
/// `rank` sorts a list: `rank[i]` is the place of its i-th smallest value. `None` where the values are
/// already rising.
pub(super) fn place(order: Order, values: u64, rank: Option<&[u32]>, visit: u64, pass: u64) -> u64 {
    let rising = |i: u64| sorted(rank, i);
    let falling = |i: u64| sorted(rank, values.saturating_sub(1).saturating_sub(i));
    match order {
        Order::Listed | Order::ThereAndBack => visit,
        Order::Rising => rising(visit),
        Order::Falling => falling(visit),
        Order::Serpentine if pass.is_multiple_of(2) => rising(visit),
        Order::Serpentine => falling(visit),
        Order::Shuffled { seed } => permute(mix(seed ^ mix(pass)), values, visit),
    }
}

/// Index of the value at a place: the same but for there-and-back, which has each value but one twice.
pub(super) fn value_at(order: Order, values: u64, rank: Option<&[u32]>, place: u64) -> u64 {
    match order {
        Order::ThereAndBack => {
            let last = values.saturating_sub(1);
            let back = last.saturating_mul(2).saturating_sub(place);
            sorted(rank, place.min(back))
        }
        _ => place,
    }
}

fn sorted(rank: Option<&[u32]>, i: u64) -> u64 {
    let ranked = rank.and_then(|rank| rank.get(usize::try_from(i).ok()?));
    ranked.map_or(i, |place| u64::from(*place))
}

/// A permutation of 0..count without memory: a four-round Feistel network over the next even number of
/// bits, walking along the cycle until it falls below `count` (cycle walking: J. Black and P. Rogaway,
/// "Ciphers with arbitrary finite domains", CT-RSA 2002). The walk takes at most 4 turns on average.
pub(super) fn permute(seed: u64, count: u64, index: u64) -> u64 {
    if count < 2 {
        return index;
    }
    let bits = 64 - (count - 1).leading_zeros();
    let half = bits.div_ceil(2);
    let mask = (1u64 << half) - 1;
    let mut value = index;
    loop {
        let (mut left, mut right) = (value >> half, value & mask);
        for round in 0..4u64 {
            let scrambled = mix(seed ^ mix(right ^ (round << 56))) & mask;
            (left, right) = (right, left ^ scrambled);
        }
        value = (left << half) | right;
        if value < count {
            return value;
        }
    }
}

/// The finaliser of SplitMix64 (G. Steele, D. Lea, C. Flood, OOPSLA 2014).
fn mix(value: u64) -> u64 {
    let mut z = value.wrapping_add(0x9e37_79b9_7f4a_7c15);
    z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn visits(order: Order, n: u64, pass: u64) -> Vec<u64> {
        (0..places(order, n))
            .map(|v| value_at(order, n, None, place(order, n, None, v, pass)))
            .collect()
    }

    #[test]
    fn orders_visit_as_named() {
        assert_eq!(visits(Order::Listed, 4, 0), [0, 1, 2, 3]);
        assert_eq!(visits(Order::Falling, 4, 0), [3, 2, 1, 0]);
        assert_eq!(visits(Order::Serpentine, 3, 0), [0, 1, 2]);
        assert_eq!(visits(Order::Serpentine, 3, 1), [2, 1, 0]);
        assert_eq!(visits(Order::ThereAndBack, 3, 0), [0, 1, 2, 1, 0]);
        assert_eq!(visits(Order::ThereAndBack, 1, 0), [0]);
    }

    #[test]
    fn a_list_is_ranked() {
        let rank = [2, 0, 1];
        let at = |order, visit| place(order, 3, Some(&rank), visit, 0);
        assert_eq!([0, 1, 2].map(|v| at(Order::Rising, v)), [2, 0, 1]);
        assert_eq!([0, 1, 2].map(|v| at(Order::Falling, v)), [1, 0, 2]);
        assert_eq!(
            [0, 1, 2, 3, 4].map(|v| value_at(Order::ThereAndBack, 3, Some(&rank), v)),
            [2, 0, 1, 0, 2]
        );
    }

    #[test]
    fn a_shuffle_visits_every_place_once() {
        for count in [1, 2, 3, 5, 16, 17, 41, 1000, 4097] {
            let mut seen: Vec<u64> = (0..count).map(|i| permute(7, count, i)).collect();
            seen.sort_unstable();
            assert_eq!(seen, (0..count).collect::<Vec<_>>(), "{count}");
        }
    }

    #[test]
    fn a_shuffle_depends_on_seed_and_pass_alone() {
        let order = |seed, pass| visits(Order::Shuffled { seed }, 41, pass);
        assert_eq!(order(1, 0), order(1, 0));
        assert_ne!(order(1, 0), order(2, 0));
        assert_ne!(order(1, 0), order(1, 1));
        assert_ne!(order(1, 0), (0..41).collect::<Vec<_>>());
    }
}
