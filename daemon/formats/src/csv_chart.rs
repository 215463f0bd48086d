//! Chart rows as CSV: patients, medicines, results; which of the three, the header row says. Columns are documented in
//! `config/README.md`. Good rows are kept, bad ones reported one by one.

use crate::{BadRow, Chart, Companions, Content, Error, Row, Site, time};
use chrono::NaiveDate;
use ebbmark_rules::codes::Meaning;
use ebbmark_rules::fact::{
    Administration, At, Body, Bound, Code, Condition, Description, Dose, LabResult, MedicineName,
    Order, Place, ResultStatus, ResultValue, Sex, Specimen,
};
use ebbmark_rules::ids::{Bed, OrderId, PatientId, Private, ResultId, Ward};
use ebbmark_rules::units::Kg;
use serde::de::{DeserializeOwned, IntoDeserializer, value::StrDeserializer};

const LARGEST: usize = 64 << 20;
const LONGEST_FIELD: usize = 4096;
const MOST_ROWS: usize = 500_000;

const PATIENTS: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "event",
    "at",
    "ward",
    "bed",
    "sex",
    "birth_date",
    "weight_kg",
    "pseudonym",
    "name",
    "other_id",
    "condition",
];
const MEDICINES: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "order_id",
    "admin_id",
    "event",
    "code_system",
    "code",
    "name",
    "dose",
    "dose_unit",
    "route",
    "frequency",
    "start",
    "end",
    "status",
    "recorded_at",
];
const RESULTS: &[&str] = &[
    "message_id",
    "patient_id",
    "patient_issuer",
    "order_id",
    "code_system",
    "code",
    "name",
    "value",
    "comparator",
    "unit",
    "status",
    "collected_at",
    "reported_at",
    "comment",
];

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Sheet {
    Patients,
    Medicines,
    Results,
}

impl Sheet {
    fn columns(self) -> &'static [&'static str] {
        match self {
            Sheet::Patients => PATIENTS,
            Sheet::Medicines => MEDICINES,
            Sheet::Results => RESULTS,
        }
    }

    /// The columns without which a sheet is not this one.
    fn needs(self) -> &'static [&'static str] {
        match self {
            Sheet::Patients => &["patient_id", "event", "at"],
            Sheet::Medicines => &["patient_id", "event", "name", "recorded_at"],
            Sheet::Results => {
                &["patient_id", "order_id", "code", "value", "unit", "status", "collected_at"]
            }
        }
    }

    fn of(header: &[&str]) -> Option<Self> {
        let has = |column: &&str| header.contains(column);
        [Sheet::Results, Sheet::Medicines, Sheet::Patients]
            .into_iter()
            .find(|sheet| sheet.needs().iter().all(has))
    }
}

/// Whether the first line is a header of one of the three sheets.
pub(crate) fn looks_like(bytes: &[u8]) -> bool {
    let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    let line = bytes.split(|byte| *byte == b'\n').next().unwrap_or(&[]);
    let Ok(line) = std::str::from_utf8(line.get(..LONGEST_FIELD).unwrap_or(line)) else {
        return false;
    };
    let columns: Vec<&str> =
        line.trim().split(',').map(|name| name.trim_matches('"').trim()).collect();
    Sheet::of(&columns).is_some()
}

/// One row by column name.
struct Fields<'r> {
    header: &'r csv::StringRecord,
    record: &'r csv::StringRecord,
    site: &'r Site,
}

impl Fields<'_> {
    fn get(&self, column: &str) -> &str {
        let index = self.header.iter().position(|name| name == column);
        index.and_then(|index| self.record.get(index)).unwrap_or("").trim()
    }

    fn some(&self, column: &str) -> Option<&str> {
        Some(self.get(column)).filter(|text| !text.is_empty())
    }

    fn needed(&self, column: &str) -> Result<&str, String> {
        self.some(column).ok_or_else(|| format!("column `{column}` is empty"))
    }

    fn patient(&self, column: &str) -> Result<PatientId, String> {
        let issuer = self.some("patient_issuer").unwrap_or(&self.site.issuer);
        PatientId::new(issuer, self.needed(column)?)
            .ok_or_else(|| format!("column `{column}` is empty"))
    }

    fn time(&self, column: &str) -> Result<time::Told, String> {
        time::rfc3339(self.needed(column)?, self.site)
            .map_err(|why| format!("column `{column}` {why}"))
    }

    fn time_if_any(&self, column: &str) -> Result<Option<At>, String> {
        self.some(column).map(|_| self.time(column).map(|told| told.at)).transpose()
    }

    fn number(&self, column: &str) -> Result<f64, String> {
        let number = self.needed(column)?.parse::<f64>().ok().filter(|number| number.is_finite());
        number.ok_or_else(|| format!("column `{column}` is not a number"))
    }

    /// A closed word list, as the rules crate spells it.
    fn word<T: DeserializeOwned>(&self, column: &str) -> Result<T, String> {
        let text: StrDeserializer<'_, serde::de::value::Error> =
            self.needed(column)?.into_deserializer();
        T::deserialize(text).map_err(|_| format!("column `{column}` is not one of its words"))
    }
}

pub(crate) fn read(bytes: &[u8], _: &Companions<'_>, site: &Site) -> Result<Content, Error> {
    let hold = |why: &str| Error::Hold(format!("cannot read the CSV chart: {why}"));
    if bytes.len() > LARGEST {
        return Err(hold("it is larger than 64 MiB"));
    }
    let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    if !bytes.ends_with(b"\n") {
        // A writer that was interrupted leaves a row cut short; one that finished ends its last line.
        return Err(Error::NotYet("the last line has no end: the file may not be complete".into()));
    }
    let mut reader = csv::ReaderBuilder::new().flexible(true).from_reader(bytes);
    let header = reader.headers().map_err(|_| hold("its header row is not UTF-8 text"))?.clone();
    let columns: Vec<&str> = header.iter().map(str::trim).collect();
    let header: csv::StringRecord = columns.iter().collect();
    let sheet =
        Sheet::of(&columns).ok_or_else(|| hold("its header row is that of no known sheet"))?;
    if let Some(odd) = columns.iter().find(|column| !sheet.columns().contains(column)) {
        let odd: String = odd.chars().take(24).collect();
        return Err(hold(&format!("the column `{odd}` is not known; config/README.md lists all")));
    }
    let mut chart = Chart::default();
    for (index, record) in reader.records().enumerate() {
        let place = format!("row {}", index + 2);
        if index >= MOST_ROWS {
            return Err(hold("it has more than 500,000 rows"));
        }
        let row = match &record {
            Err(_) => Err("is not UTF-8 text".to_owned()),
            Ok(record) if record.len() != header.len() => {
                Err(format!("has {} columns where the header has {}", record.len(), header.len()))
            }
            Ok(record) if record.iter().any(|field| field.len() > LONGEST_FIELD) => {
                Err("has a field of more than 4 kB".into())
            }
            Ok(record) => row(sheet, &Fields { header: &header, record, site }, &place),
        };
        match row {
            Ok(Some(row)) => chart.rows.push(row),
            Ok(None) => chart.left_out += 1,
            Err(why) => chart.bad.push(BadRow { place: place.into(), why: why.into() }),
        }
    }
    Ok(Content::Chart(chart))
}

/// `None`: understood, and of no concern here.
fn row(sheet: Sheet, fields: &Fields<'_>, place: &str) -> Result<Option<Row>, String> {
    let patient = fields.patient("patient_id")?;
    let (told, body) = match sheet {
        Sheet::Patients => (fields.time("at")?, of_patient(fields)?),
        Sheet::Medicines => of_medicine(fields)?,
        Sheet::Results => match of_result(fields)? {
            Some(body) => (fields.time("collected_at")?, body),
            None => return Ok(None),
        },
    };
    Ok(Some(Row {
        place: place.into(),
        patient,
        occurred_at: told.at,
        assumed_zone: told.assumed_zone,
        body,
    }))
}

fn of_patient(fields: &Fields<'_>) -> Result<Body, String> {
    let place = || {
        Ok::<_, String>(Place {
            ward: Ward::new(fields.needed("ward")?),
            bed: fields.some("bed").map(Bed::new),
        })
    };
    Ok(match fields.needed("event")? {
        "admit" => Body::Admitted(place()?),
        "move" => Body::Moved(place()?),
        "discharge" => Body::Discharged,
        "cancel-stay" => Body::StayCancelled { of: fields.time("at")?.at },
        "merge" => Body::Merged { into: fields.patient("other_id")? },
        "split" => Body::Split,
        "risk-recorded" => Body::Risk { condition: fields.word::<Condition>("condition")?, present: true },
        "risk-ruled-out" => Body::Risk { condition: fields.word::<Condition>("condition")?, present: false },
        "describe" => Body::Described(Description {
            sex: match fields.get("sex") {
                "F" => Some(Sex::Female),
                "M" => Some(Sex::Male),
                "O" => Some(Sex::Other),
                "" | "U" => None,
                _ => return Err("column `sex` is not F, M, O or U".into()),
            },
            birth_date: match fields.some("birth_date") {
                Some(text) => Some(
                    NaiveDate::parse_from_str(text, "%Y-%m-%d")
                        .map_err(|_| "column `birth_date` is not a date such as 1950-02-03".to_owned())?,
                ),
                None => None,
            },
            weight: match fields.some("weight_kg") {
                Some(_) => Some(weight(fields.number("weight_kg")?)?),
                None => None,
            },
            name: fields.some("name").map(Private::new),
            pseudonym: fields.some("pseudonym").map(Into::into),
        }),
        _ => return Err("column `event` is not one of admit, move, discharge, cancel-stay, describe, merge, split, risk-recorded, risk-ruled-out".into()),
    })
}

fn weight(kg: f64) -> Result<Kg, String> {
    Kg::new(kg)
        .ok()
        .filter(|kg| (0.5..=400.0).contains(&kg.get()))
        .ok_or_else(|| "column `weight_kg` is not a body weight".into())
}

fn of_medicine(fields: &Fields<'_>) -> Result<(time::Told, Body), String> {
    let order = || fields.needed("order_id").map(OrderId::new);
    let medicine = || {
        let code = fields
            .some("code")
            .map(|code| Code { system: fields.get("code_system").into(), code: code.into() });
        Ok::<_, String>(MedicineName {
            codes: code.into_iter().collect(),
            text: fields.needed("name")?.into(),
        })
    };
    let dose = || {
        fields
            .some("dose")
            .map(|amount| Dose { amount: amount.into(), unit: fields.get("dose_unit").into() })
    };
    let route = || fields.some("route").map(Into::into);
    let recorded = || fields.time("recorded_at");
    Ok(match fields.needed("event")? {
        "order" => {
            let body = Body::Ordered(Order {
                id: order()?,
                medicine: medicine()?,
                dose: dose(),
                route: route(),
                frequency: fields.some("frequency").map(Into::into),
                starts: fields.time_if_any("start")?,
                ends: fields.time_if_any("end")?,
            });
            (recorded()?, body)
        }
        "admin" => {
            // When it was given is its start; a row without one was given when it was recorded.
            let told =
                if fields.some("start").is_some() { fields.time("start")? } else { recorded()? };
            let body = Body::Given(Administration {
                id: fields.needed("admin_id")?.into(),
                order: fields.some("order_id").map(OrderId::new),
                medicine: medicine()?,
                dose: dose(),
                route: route(),
            });
            (told, body)
        }
        "hold" => (recorded()?, Body::OrderHeld(order()?)),
        "resume" => (recorded()?, Body::OrderResumed(order()?)),
        "stop" => (recorded()?, Body::OrderStopped(order()?)),
        "cancel" => (recorded()?, Body::OrderCancelled(order()?)),
        "not-given" => {
            (recorded()?, Body::NotGiven { administration: fields.needed("admin_id")?.into() })
        }
        _ => {
            return Err(
                "column `event` is not one of order, admin, hold, resume, stop, cancel, not-given"
                    .into(),
            );
        }
    })
}

fn of_result(fields: &Fields<'_>) -> Result<Option<Body>, String> {
    let (system, code) = (fields.get("code_system"), fields.needed("code")?);
    let codes = &fields.site.codes;
    let analyte = match codes.meaning(system, code) {
        Some(Meaning::Analyte(analyte)) => analyte,
        Some(Meaning::LeftOut) => return Ok(None),
        None => {
            return Err(format!(
                "the code `{}` of `{}` is not known",
                clipped(code),
                clipped(system)
            ));
        }
    };
    let status = match fields.needed("status")? {
        "P" => ResultStatus::Preliminary,
        "F" => ResultStatus::Final,
        "C" => ResultStatus::Corrected,
        "X" => ResultStatus::Cancelled,
        "W" => ResultStatus::EnteredInError,
        _ => return Err("column `status` is not one of P, F, C, X, W".into()),
    };
    let bound = match fields.get("comparator") {
        "" | "=" => Bound::Equal,
        "<" | "<=" => Bound::Below,
        ">" | ">=" => Bound::Above,
        _ => return Err("column `comparator` is not one of <, <=, >, >=".into()),
    };
    let value = match fields.some("value") {
        None => None,
        Some(_) => {
            let number = analyte
                .convert(fields.number("value")?, codes.unit(system, code, fields.get("unit")))
                .map_err(|why| why.to_string())?;
            Some(ResultValue { number, bound })
        }
    };
    let specimen = codes.specimen(fields.get("comment"));
    // A laboratory that could not measure a spoilt specimen says so in the comment alone.
    let spoilt = specimen != Specimen::default();
    if value.is_none() && !spoilt && matches!(status, ResultStatus::Final | ResultStatus::Corrected)
    {
        return Err("column `value` is empty in a result that is said to be final".into());
    }
    Ok(Some(Body::Result(LabResult {
        id: ResultId::new(format!("{}/{}", fields.needed("order_id")?, code)),
        analyte,
        value,
        as_sent: format!(
            "{}{} {}",
            fields.get("comparator"),
            fields.get("value"),
            fields.get("unit")
        )
        .trim()
        .into(),
        status,
        issued_at: fields.time_if_any("reported_at")?,
        specimen,
    })))
}

/// What a message may show of a text that a stranger wrote.
fn clipped(text: &str) -> String {
    text.chars().take(16).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn chart(text: &str) -> Chart {
        let site = Site {
            zone: chrono_tz::Europe::London,
            issuer: "SALT".into(),
            codes: Default::default(),
        };
        assert!(looks_like(text.as_bytes()));
        match read(text.as_bytes(), &Companions::default(), &site) {
            Ok(Content::Chart(chart)) => chart,
            other => panic!("{other:?}"),
        }
    }

    const RESULT: &str = "message_id,patient_id,patient_issuer,order_id,code_system,code,name,value,comparator,unit,status,collected_at,reported_at,comment\n";

    #[test]
    fn good_rows_stay_and_bad_ones_are_named() {
        let found = chart(&format!(
            "{RESULT}1,1001,,L1,LN,2823-3,K,3.1,,mmol/L,F,2026-03-10T06:00:00Z,2026-03-10T07:00:00Z,\n\
             2,1001,,L2,LN,2823-3,K,3.1,,,F,2026-03-10T06:00:00Z,,\n\
             3,1001,,L3,LN,2951-2,Na,31,,mmol/L,F,2026-03-10T06:00:00Z,,\n\
             4,1001,,L4,LN,2823-3,K,31,,mmol/L,F,2026-03-10T06:00:00Z,,\n\
             5,1001,,L5,LN,2601-3,Mg,1.5,,mEq/L,F,2026-03-10T06:00:00Z,,slightly Haemolysed\n"
        ));
        assert_eq!(found.rows.len(), 2);
        let why: Vec<_> = found.bad.iter().map(|bad| (&*bad.place, &*bad.why)).collect();
        assert!(
            why[0].0 == "row 3" && why[0].1.contains("unit of potassium is not stated"),
            "{why:?}"
        );
        assert!(why[1].1.contains("`2951-2` of `LN` is not known"), "{why:?}");
        assert!(why[2].1.contains("outside 1 to 12"), "{why:?}");
        let Body::Result(magnesium) = &found.rows[1].body else { panic!() };
        assert!(
            (magnesium.value.unwrap().number - 0.75).abs() < 1e-12 && magnesium.specimen.haemolysed
        );
        assert_eq!(&*magnesium.as_sent, "1.5 mEq/L");
    }

    #[test]
    fn a_sites_own_codes_and_units_are_read_as_it_says() {
        let own = "[[analyte]]\nsystem = \"LAB\"\ncode = \"K\"\nis = \"potassium\"\nunit = \"mmol/L\"\n\
                   [[left_out]]\nsystem = \"LAB\"\ncodes = [\"NA\"]\n[units]\n\"MMOL/L\" = \"mmol/L\"\n";
        let site = Site {
            zone: chrono_tz::UTC,
            issuer: "SALT".into(),
            codes: std::sync::Arc::new(ebbmark_rules::codes::LocalCodes::parse(own).unwrap()),
        };
        let text = format!(
            "{RESULT}1,1001,,L1,LAB,K,K,3.1,,,F,2026-03-10T06:00:00Z,,\n\
             2,1001,,L2,LAB,NA,Na,140,,,F,2026-03-10T06:00:00Z,,\n\
             3,1001,,L3,LAB,K,K,4.1,,MMOL/L,F,2026-03-10T07:00:00Z,,\n\
             4,1001,,L4,LAB,K,K,,,,F,2026-03-10T08:00:00Z,,haemolysed: not reported\n\
             5,1001,,L5,LAB,CL,Cl,101,,,F,2026-03-10T06:00:00Z,,\n"
        );
        let Ok(Content::Chart(chart)) = read(text.as_bytes(), &Companions::default(), &site) else {
            panic!()
        };
        assert_eq!((chart.rows.len(), chart.left_out, chart.bad.len()), (3, 1, 1));
        let value = |row: &Row| {
            let Body::Result(result) = &row.body else { panic!() };
            result.value.map(|value| value.number)
        };
        let values: Vec<_> = chart.rows.iter().map(value).collect();
        assert_eq!(values, [Some(3.1), Some(4.1), None]);
        assert_eq!(&*chart.bad[0].why, "the code `CL` of `LAB` is not known");
    }

    #[test]
    fn medicines_and_patients_are_told_by_their_header() {
        let found = chart(
            "message_id,patient_id,patient_issuer,order_id,admin_id,event,code_system,code,name,dose,dose_unit,route,frequency,start,end,status,recorded_at\n\
             1,1001,,O1,,order,ATC,N05AD01,Haloperidol,2,mg,PO,every 12 h,2026-03-10T08:00:00Z,,,2026-03-10T07:30:00Z\n\
             2,1001,,O1,A1,admin,ATC,N05AD01,Haloperidol,2,mg,PO,,2026-03-10T08:05:00Z,,,2026-03-10T08:06:00Z\n\
             3,1001,,,,stop,,,Haloperidol,,,,,,,,2026-03-10T08:06:00Z\n",
        );
        assert_eq!((found.rows.len(), found.bad.len()), (2, 1));
        assert_eq!(
            found.rows[1].occurred_at.to_rfc3339(),
            "2026-03-10T08:05:00+00:00",
            "given at its start"
        );
        assert_eq!(&*found.bad[0].why, "column `order_id` is empty");
        let found = chart(
            "patient_id,event,at,ward,bed\n1001,admit,2026-03-10T07:00:00Z,Tern,T3\n1001,fly,2026-03-10T07:00:00Z,,\n",
        );
        assert!(
            matches!(&found.rows[0].body, Body::Admitted(place) if place.ward.as_str() == "Tern")
        );
        assert!(found.bad[0].why.contains("is not one of admit"));
    }

    #[test]
    fn a_file_cut_short_is_waited_for_and_an_unknown_column_held() {
        let site = Site { zone: chrono_tz::UTC, issuer: "SALT".into(), codes: Default::default() };
        let short = format!("{RESULT}1,1001,,L1,LN,2823-3,K,3.1");
        assert!(matches!(
            read(short.as_bytes(), &Companions::default(), &site),
            Err(Error::NotYet(_))
        ));
        let odd = "patient_id,event,at,colour\n";
        assert!(
            matches!(read(odd.as_bytes(), &Companions::default(), &site), Err(Error::Hold(why)) if why.contains("`colour`"))
        );
    }
}
