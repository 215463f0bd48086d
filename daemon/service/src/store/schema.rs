//! The tables, and how an older store becomes a newer one.

use super::StoreError;
use rusqlite::{Connection, TransactionBehavior};

/// One step per version, oldest first; a store's `user_version` counts the steps it has taken. A step that has
/// been released is never changed: what comes later is a new step.
const STEPS: &[&str] = &[include_str!("schema-1.sql")];

/// Brings the store to this program's version. A store from a newer program is refused: its rows may mean what this
/// one can't know.
pub(super) fn migrate(connection: &mut Connection) -> Result<(), StoreError> {
    let found: i64 = connection
        .query_row("PRAGMA user_version", [], |row| row.get(0))
        .map_err(StoreError::sql("read its version"))?;
    let known = STEPS.len() as i64;
    if found > known {
        return Err(StoreError::FromTheFuture { found, known });
    }
    for (version, step) in (1..).zip(STEPS).skip_while(|(version, _)| *version <= found) {
        let change = connection
            .transaction_with_behavior(TransactionBehavior::Immediate)
            .map_err(StoreError::sql("begin a migration"))?;
        change.execute_batch(step).map_err(StoreError::sql("migrate"))?;
        change
            .pragma_update(None, "user_version", version)
            .map_err(StoreError::sql("set its version"))?;
        change.commit().map_err(StoreError::sql("commit a migration"))?;
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shape(connection: &Connection) -> Vec<String> {
        let mut query = connection
            .prepare("SELECT type || ' ' || name || ' ' || coalesce(sql, '') FROM sqlite_schema ORDER BY 1")
            .unwrap();
        query.query_map([], |row| row.get(0)).unwrap().map(Result::unwrap).collect()
    }

    /// With one step this only guards the mechanism; from the second step on it holds each older version against it.
    #[test]
    fn migrated_equals_fresh() {
        let mut fresh = Connection::open_in_memory().unwrap();
        migrate(&mut fresh).unwrap();
        for start in 0..=STEPS.len() {
            let mut older = Connection::open_in_memory().unwrap();
            for (version, step) in (1_i64..).zip(STEPS).take(start) {
                older.execute_batch(step).unwrap();
                older.pragma_update(None, "user_version", version).unwrap();
            }
            migrate(&mut older).unwrap();
            assert_eq!(shape(&older), shape(&fresh), "from version {start}");
        }
    }

    #[test]
    fn store_from_the_future_is_refused() {
        let mut connection = Connection::open_in_memory().unwrap();
        connection.pragma_update(None, "user_version", STEPS.len() as i64 + 1).unwrap();
        assert!(matches!(migrate(&mut connection), Err(StoreError::FromTheFuture { .. })));
    }
}
