//! Taking plant files.

use super::Work;
use super::access::note;
use crate::store::sqlite::fault::nanoseconds;
use crate::store::sqlite::values::hex;
use crate::store::sqlite::{read, sql};
use crate::store::{NewPlant, PutOutcome, StoredPlant};
use futures::FutureExt;
use futures::future::BoxFuture;
use sha2::{Digest, Sha256};
use sqlx::sqlite::SqliteConnection;

/// Takes a plant file.
pub(in crate::store::sqlite) struct PutPlant(pub NewPlant);

impl Work for PutPlant {
    type Output = PutOutcome;

    fn run<'a>(
        &'a self,
        on: &'a mut SqliteConnection,
    ) -> BoxFuture<'a, Result<PutOutcome, sqlx::Error>> {
        async move {
            let new = &self.0;
            let current = read::current_plant(&mut *on, &new.name).await?;
            if !new.precondition.holds(current.as_ref()) {
                return Ok(PutOutcome::PreconditionFailed);
            }
            let digest = Sha256::digest(new.canonical.as_bytes());
            let hexadecimal = hex(&digest);
            let revision = match current {
                Some(current) if current.digest == hexadecimal => {
                    return Ok(PutOutcome::Unchanged(current));
                }
                Some(current) => current.revision + 1,
                None => 1,
            };
            sqlx::query(sql::INSERT_PLANT)
                .bind(&new.name)
                .execute(&mut *on)
                .await?;
            sqlx::query(sql::INSERT_REVISION)
                .bind(&new.name)
                .bind(revision)
                .bind(&new.title)
                .bind(&digest[..])
                .bind(&new.media_type)
                .bind(&new.source)
                .bind(&new.canonical)
                .bind(nanoseconds(new.received))
                .execute(&mut *on)
                .await?;
            let numbers = [
                ("revision", revision.into()),
                ("digest", hexadecimal.as_str().into()),
            ];
            note(on, new.deed.as_ref(), numbers).await?;
            Ok(PutOutcome::Created(StoredPlant {
                name: new.name.clone(),
                revision,
                digest: hexadecimal,
                media_type: new.media_type.clone(),
                source: new.source.clone(),
                canonical: new.canonical.clone(),
                created: new.received,
            }))
        }
        .boxed()
    }
}
