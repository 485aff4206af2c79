//! Registers, one channel at a time, in every order.

use super::{ChannelProbe, SourceProbe};
use crate::config::{ByteOrder, ModbusChannel, ModbusRtuSource, ModbusTcpSource, RegisterTable};
use crate::intake::Surroundings;
use crate::intake::decode::{When, reading};
use crate::intake::link::Link as _;
use crate::intake::modbus::codec::{Request, number};
use crate::intake::modbus::master::{Line, Master, Patience, ReadError};
use crate::intake::modbus::serial_line::{SerialLine, Timing};
use crate::intake::modbus::tcp_line::TcpLine;
use crate::record::SourceName;

/// The four orders as the site file spells them.
const ORDERS: [(&str, ByteOrder); 4] = [
    ("big", ByteOrder::Big),
    ("little", ByteOrder::Little),
    ("word-swapped", ByteOrder::WordSwapped),
    ("byte-swapped", ByteOrder::ByteSwapped),
];

pub(super) async fn rtu(
    name: &SourceName,
    settings: &ModbusRtuSource,
    around: &Surroundings,
) -> SourceProbe {
    match settings.serial.open().await {
        Ok(port) => {
            let line = SerialLine::new(port, Timing::of(settings));
            let patience = Patience {
                timeout: settings.timeout,
                retries: settings.retries,
            };
            registers(name, line, patience, &settings.channels, around).await
        }
        Err(why) => SourceProbe::failed(name, why.to_string()),
    }
}

pub(super) async fn tcp(
    name: &SourceName,
    settings: &ModbusTcpSource,
    around: &Surroundings,
) -> SourceProbe {
    match settings.open().await {
        Ok(stream) => {
            let line = TcpLine::new(stream, settings.timeout);
            let patience = Patience {
                timeout: settings.timeout,
                retries: settings.retries,
            };
            registers(name, line, patience, &settings.channels, around).await
        }
        Err(why) => SourceProbe::failed(name, why.to_string()),
    }
}

async fn registers(
    name: &SourceName,
    line: impl Line,
    patience: Patience,
    channels: &[ModbusChannel],
    around: &Surroundings,
) -> SourceProbe {
    let mut master = Master::new(line, patience);
    let mut probe = SourceProbe::of(name, Vec::new());
    for channel in channels {
        let register = channel.register;
        let request = Request {
            unit: channel.unit_id,
            table: register.table,
            address: register.address,
            count: register.number.registers(),
        };
        let answer = master.read(&request).await;
        if let Err(ReadError::Gone(why)) = &answer {
            probe.trouble = Some(why.to_string());
            return probe;
        }
        probe.channels.push(match answer {
            Ok(registers) => decoded(channel, &registers, around),
            Err(why) => ChannelProbe::silent(&channel.id, place(channel), why.to_string()),
        });
    }
    probe
}

/// Where a number is, with the count of manuals beside the protocol's own.
fn place(channel: &ModbusChannel) -> String {
    let register = channel.register;
    let table = match register.table {
        RegisterTable::Holding => "holding",
        RegisterTable::Input => "input",
    };
    format!(
        "device {}, {table} {} (in manuals {})",
        channel.unit_id,
        register.address,
        register.manual_number()
    )
}

fn decoded(channel: &ModbusChannel, registers: &[u16], around: &Surroundings) -> ChannelProbe {
    let register = channel.register;
    let of = |order| number(registers, register.number, order);
    let when = When::arrival(around.clock.read());
    let read = around.conversions.of(&channel.id).and_then(|meaning| {
        let raw = of(register.order).unwrap_or(f64::NAN);
        reading(&channel.id, when, raw, meaning)
    });
    let words: Vec<String> = registers.iter().map(|r| format!("{r:04X}")).collect();
    let (reading, why) = match read {
        Ok(reading) => (Some(reading), None),
        Err(refusal) => (None, Some(refusal.detail)),
    };
    ChannelProbe {
        channel: channel.id.to_string(),
        place: place(channel),
        raw: words.join(" "),
        reading,
        why,
        orders: ORDERS
            .iter()
            .filter_map(|(name, order)| Some((*name, of(*order)?)))
            .collect(),
    }
}
