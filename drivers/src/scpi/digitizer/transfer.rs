//! A digitizer's samples: preamble and block of one channel, held against each other and against the record
//! that was completed.

use darkline_core::trace::ChannelData;
use darkline_core::wire::block::{self, Encoding, Preamble};
use darkline_core::wire::frame::{Message, elements};
use darkline_core::wire::number;

use super::ScpiDigitizer;
use crate::map::{Field, RecordMap};
use crate::role::Outcome;
use crate::scpi::Scpi;
use crate::scpi::converse::joined;

impl ScpiDigitizer {
    fn preamble(&mut self, map: &RecordMap, answer: &[u8]) -> Outcome<(Preamble, Option<u64>)> {
        let parts = elements(answer);
        let mut preamble = Preamble {
            samples: 0,
            interval: 0.0,
            scale: 1.0,
            offset: 0.0,
            delay: 0.0,
            lowest: f64::NEG_INFINITY,
            highest: f64::INFINITY,
        };
        let mut count = None;
        for (at, field) in map.fields.iter().enumerate() {
            if *field == Field::Other {
                continue;
            }
            let Some(value) = parts.get(at).and_then(|part| number::parse(part).ok()) else {
                let wanted = format!("a preamble with {field:?} at place {}", at + 1);
                return Err(self.scpi.out_of_place(&map.preamble, answer, &wanted));
            };
            match field {
                Field::Samples => preamble.samples = value as u32,
                Field::Interval => preamble.interval = value,
                Field::Scale => preamble.scale = value,
                Field::Offset => preamble.offset = value,
                Field::Delay => preamble.delay = value,
                Field::Count => count = Some(value as u64),
                Field::Lowest => preamble.lowest = value,
                Field::Highest => preamble.highest = value,
                Field::Other => {}
            }
        }
        Ok((preamble, count))
    }

    pub(super) async fn transfer(
        &mut self,
        map: &RecordMap,
        channel: &str,
    ) -> Outcome<ChannelData> {
        let number = self.number(channel)?.to_string();
        let ask = |text: &str| text.replace("{n}", &number);
        let (first, second) = (ask(&map.preamble), ask(&map.data));
        let (answer, payload) = self.two_answers(map, &first, &second).await?;
        let (preamble, count) = self.preamble(map, &answer)?;
        if let (Some(found), Some(wanted)) = (count, self.record)
            && found != wanted
        {
            let wanted = format!("record {wanted}");
            return Err(self.scpi.exchange.misread(&first, &answer, wanted));
        }
        let codes = block::decode(&payload, map.encoding, map.byte_order).map_err(|error| {
            let wanted = error.to_string();
            self.scpi.out_of_place(&second, &payload, &wanted)
        })?;
        if map.fields.contains(&Field::Samples) && codes.len() != preamble.samples as usize {
            let wanted = format!("{} samples, as its preamble says", preamble.samples);
            return Err(self.scpi.out_of_place(&second, &payload, &wanted));
        }
        Ok(ChannelData {
            name: channel.to_owned(),
            clipped: preamble.clipped(&codes),
            codes,
            scale: preamble.scale,
            offset: preamble.offset,
            unit: "V".to_owned(),
        })
    }

    /// Preamble and samples, in one message where that is allowed.
    async fn two_answers(
        &mut self,
        map: &RecordMap,
        first: &str,
        second: &str,
    ) -> Outcome<(Vec<u8>, Vec<u8>)> {
        let samples = self
            .configured
            .as_ref()
            .map(|(plan, _)| plan.granted.samples);
        let indefinite = samples
            .zip(map.encoding.width())
            .map(|(samples, width)| samples as usize * width);
        let payload = |scpi: &mut Scpi, reply: &Message, at: usize| {
            let found = match map.encoding {
                Encoding::Ascii => reply.unit(at),
                _ => reply.block(at),
            };
            match found {
                Some(bytes) => Ok(bytes.to_vec()),
                None => Err(scpi.out_of_place(second, reply.bytes(), "a block of samples")),
            }
        };
        let exchange = &mut self.scpi.exchange;
        if self.scpi.map.talk.compound {
            let message = joined(&[first, second]);
            let reply = exchange
                .ask_within(&[&message], map.transfer, indefinite)
                .await?;
            if reply.len() != 2 {
                let mut none = Vec::new();
                self.scpi
                    .take_answers(&message, 2, &reply, &mut none)
                    .await?;
            }
            let data = payload(&mut self.scpi, &reply, 1)?;
            return Ok((reply.unit(0).unwrap_or_default().to_vec(), data));
        }
        let answer = exchange.ask(&[first]).await?;
        let reply = exchange
            .ask_within(&[second], map.transfer, indefinite)
            .await?;
        let data = payload(&mut self.scpi, &reply, 0)?;
        Ok((answer.bytes().to_vec(), data))
    }
}
