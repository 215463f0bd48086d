//! Files as a ward exports them, made up here.

use chrono::{SecondsFormat, TimeDelta};
use ebbmark_rules::fact::At;
use std::fmt::Write;

/// The moment at which tests on a clock of their own begin.
pub(crate) fn morning() -> At {
    "2026-03-02T09:00:00Z".parse().unwrap()
}

fn before(now: At, minutes: i64) -> String {
    (now - TimeDelta::minutes(minutes)).to_rfc3339_opts(SecondsFormat::Secs, true)
}

/// A patient on Tern ward, in the columns of `config/README.md`.
pub(crate) fn patient(number: usize, now: At) -> String {
    let at = before(now, 60);
    format!(
        "message_id,patient_id,event,at,ward,bed,sex,birth_date\n\
         m1,{number},admit,{at},Tern,{number},,\n\
         m2,{number},describe,{at},,,F,1950-02-03\n"
    )
}

/// The patient is ordered haloperidol, which is on the shipped list.
pub(crate) fn haloperidol(number: usize, now: At) -> String {
    let at = before(now, 60);
    format!(
        "patient_id,order_id,event,name,dose,dose_unit,route,start,recorded_at\n\
         {number},o{number},order,haloperidol,2.5,mg,PO,{at},{at}\n"
    )
}

/// A potassium, reported so many minutes ago; versions of one result share their order number.
pub(crate) fn potassium(number: usize, value: &str, status: &str, now: At, minutes: i64) -> String {
    let (collected, reported) = (before(now, 30), before(now, minutes));
    format!(
        "patient_id,order_id,code_system,code,name,value,unit,status,collected_at,reported_at\n\
         {number},r{number},LOINC,2823-3,potassium,{value},mmol/L,{status},{collected},{reported}\n"
    )
}

/// A tracing of three flat leads: readable, of this patient, and nothing can be told from it.
pub(crate) fn tracing(number: usize, birth_date: &str, now: At) -> String {
    let start = before(now, 15);
    let mut text = format!(
        "#ecgcsv=1\n#patient_id={number}\n#sex=F\n#birth_date={birth_date}\n#start={start}\n\
         #fs_hz=500\n#unit=uV\n#lsb=1\n#samples=5000\nI,II,V2\n"
    );
    for sample in 0..5000 {
        let _ = writeln!(text, "{0},{0},{0}", (sample + number) % 3); // a String can't fail
    }
    text
}
