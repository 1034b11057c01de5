//! The drivers against an instrument that shares no line with this project: command tree, parser, status and
//! error queue are those of the registry's crates `scpi` and `scpi-contrib`, served over TCP.

use std::collections::VecDeque;

use darkline_core::channel::Role;
use darkline_core::quantity::Setting;
use darkline_drivers::error::DriverError;
use darkline_drivers::link::Address;
use darkline_drivers::map::CommandMap;
use darkline_drivers::open;
use darkline_drivers::role::Role as _;
use scpi::error::{Error, ErrorCode, Result};
use scpi::tree::prelude::*;
use scpi::{Branch, Context, Device, Leaf, Root};
use scpi_contrib::ieee488::prelude::*;
use scpi_contrib::scpi1999::prelude::*;
use scpi_contrib::{
    ieee488_cls, ieee488_ese, ieee488_esr, ieee488_idn, ieee488_opc, ieee488_rst, ieee488_sre,
    ieee488_stb, ieee488_tst, ieee488_wai, scpi_status, scpi_system,
};
use tokio::io::{AsyncBufReadExt, AsyncWriteExt, BufReader};

#[derive(Default)]
struct Supply {
    esr: u8,
    ese: u8,
    sre: u8,
    operation: EventRegister,
    questionable: EventRegister,
    errors: VecDeque<Error>,
    current: f64,
    output: bool,
}

impl Device for Supply {
    fn handle_error(&mut self, error: Error) {
        self.push_error(error);
    }
}

impl IEEE4882 for Supply {
    fn stb(&self) -> u8 {
        self.scpi_stb()
    }
    fn sre(&self) -> u8 {
        self.sre
    }
    fn set_sre(&mut self, value: u8) {
        self.sre = value;
    }
    fn esr(&self) -> u8 {
        self.esr
    }
    fn set_esr(&mut self, value: u8) {
        self.esr = value;
    }
    fn ese(&self) -> u8 {
        self.ese
    }
    fn set_ese(&mut self, value: u8) {
        self.ese = value;
    }
    fn tst(&mut self) -> Result<()> {
        Ok(())
    }
    fn rst(&mut self) -> Result<()> {
        Ok(())
    }
    fn cls(&mut self) -> Result<()> {
        self.scpi_cls()
    }
    fn opc(&mut self) -> Result<()> {
        self.scpi_opc()
    }
}

impl GetEventRegister<Operation> for Supply {
    fn register(&self) -> &EventRegister {
        &self.operation
    }
    fn register_mut(&mut self) -> &mut EventRegister {
        &mut self.operation
    }
}

impl GetEventRegister<Questionable> for Supply {
    fn register(&self) -> &EventRegister {
        &self.questionable
    }
    fn register_mut(&mut self) -> &mut EventRegister {
        &mut self.questionable
    }
}

impl ErrorQueue for Supply {
    fn push_back_error(&mut self, error: Error) {
        self.errors.push_back(error);
    }
    fn pop_front_error(&mut self) -> Option<Error> {
        self.errors.pop_front()
    }
    fn num_errors(&self) -> usize {
        self.errors.len()
    }
    fn clear_errors(&mut self) {
        self.errors.clear();
    }
}

impl ScpiDevice for Supply {}

struct Current;

impl Command<Supply> for Current {
    fn meta(&self) -> CommandTypeMeta {
        CommandTypeMeta::Both
    }
    fn event(
        &self,
        supply: &mut Supply,
        _: &mut Context,
        mut parameters: Parameters,
    ) -> Result<()> {
        let value: f64 = parameters.next_data()?;
        if value.abs() > 0.1 {
            return Err(ErrorCode::DataOutOfRange.into());
        }
        supply.current = value;
        Ok(())
    }
    fn query(
        &self,
        supply: &mut Supply,
        _: &mut Context,
        _: Parameters,
        mut response: ResponseUnit,
    ) -> Result<()> {
        response.data(supply.current).finish()
    }
}

struct Output;

impl Command<Supply> for Output {
    fn meta(&self) -> CommandTypeMeta {
        CommandTypeMeta::Both
    }
    fn event(
        &self,
        supply: &mut Supply,
        _: &mut Context,
        mut parameters: Parameters,
    ) -> Result<()> {
        supply.output = parameters.next_data()?;
        Ok(())
    }
    fn query(
        &self,
        supply: &mut Supply,
        _: &mut Context,
        _: Parameters,
        mut response: ResponseUnit,
    ) -> Result<()> {
        response.data(supply.output).finish()
    }
}

const TREE: Node<Supply> = Root![
    ieee488_cls!(),
    ieee488_ese!(),
    ieee488_esr!(),
    ieee488_idn!(b"Elsewhere", b"PSU", b"42", b"1"),
    ieee488_opc!(),
    ieee488_rst!(),
    ieee488_sre!(),
    ieee488_stb!(),
    ieee488_tst!(),
    ieee488_wai!(),
    scpi_status!(),
    scpi_system!(),
    Leaf!(b"OUTPut" => &Output),
    Branch![b"SOURce"; Leaf!(b"CURRent" => &Current)],
    Branch![b"MEASure"; Leaf!(b"CURRent" => &Current)]
];

fn answer(supply: &mut Supply, line: &str) -> Vec<u8> {
    let (mut context, mut response) = (Context::default(), Vec::new());
    // Its errors go into its own queue.
    let _ = TREE.run(line.as_bytes(), supply, &mut context, &mut response);
    response
}

/// Serves one client after another on a free port of this machine.
async fn served() -> Address {
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let port = listener.local_addr().unwrap().port();
    tokio::spawn(async move {
        let mut supply = Supply {
            esr: 128,
            ..Supply::default()
        };
        while let Ok((stream, _)) = listener.accept().await {
            let (from, mut to) = stream.into_split();
            let mut lines = BufReader::new(from).lines();
            while let Ok(Some(line)) = lines.next_line().await {
                let response = answer(&mut supply, &line);
                if !response.is_empty() && to.write_all(&response).await.is_err() {
                    break;
                }
            }
        }
    });
    format!("tcp://127.0.0.1:{port}").parse().unwrap()
}

#[tokio::test]
async fn the_generic_supply_drives_an_instrument_of_another_maker() {
    let address = served().await;
    let map = CommandMap::find("scpi-current-supply", &[]).unwrap();
    let mut coil = open("coil", Role::CurrentSupply, map, Box::new(address), None)
        .await
        .unwrap();
    assert_eq!(coil.identity().to_string(), "Elsewhere,PSU,42,1");
    for value in [0.0203, -0.02, 1e-5, 0.0] {
        let granted = coil.set("current", Setting::Number(value)).await.unwrap();
        assert_eq!(granted.granted, Setting::Number(value));
        assert_eq!(coil.measure("current").await.unwrap(), value);
    }
    coil.set("output", Setting::Switch(true)).await.unwrap();
    let error = coil.set("current", Setting::Number(0.2)).await.unwrap_err();
    assert!(
        matches!(&error, DriverError::Refused { errors, .. } if errors[0].number == -222),
        "{error}"
    );
    assert_eq!(
        coil.readback("current").await.unwrap(),
        Setting::Number(0.0)
    );
    coil.reconnect().await.unwrap();
    coil.check().await.unwrap();
}

#[tokio::test]
async fn a_header_it_does_not_know_is_told_in_its_words() {
    let address = served().await;
    let text = "role = \"current-supply\"\n[quantity.current]\nsay = \"SOUR:AMPS {A}\"\nreadback = \"SOUR:CURR?\"";
    let map = CommandMap::parse(text, "wrong.toml").unwrap();
    let mut coil = open("coil", Role::CurrentSupply, map, Box::new(address), None)
        .await
        .unwrap();
    let error = coil
        .set("current", Setting::Number(0.01))
        .await
        .unwrap_err();
    assert!(
        matches!(&error, DriverError::Refused { errors, .. } if errors[0].number == -113),
        "{error}"
    );
}

#[tokio::test]
async fn nobody_listens() {
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let port = listener.local_addr().unwrap().port();
    drop(listener);
    let address: Address = format!("tcp://127.0.0.1:{port}").parse().unwrap();
    let map = CommandMap::find("scpi-monitor", &[]).unwrap();
    let error = open("lock", Role::Monitor, map, Box::new(address), None)
        .await
        .err();
    assert!(
        matches!(error, Some(DriverError::Unreachable { .. })),
        "{error:?}"
    );
}
