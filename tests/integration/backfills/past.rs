//! Readings for a period whose own readings are kept no longer.

use super::{all_made, csv, filled, history, start};
use crate::harness::{PLANT, Service};
use crate::readings::{rfc3339, versions};
use time::Duration;

/// A report is never made again from a part of what it was made from.
#[tokio::test]
async fn a_report_outlives_its_samples() {
    let service = Service::start();
    let file = PLANT.to_owned() + "\n[retention]\nsamples = \"60 d\"\n";
    service.put_plant_file("mixer", &file).await;
    filled(&service, "first?complete=true", csv(&history(1, 0.0))).await;
    all_made(&service, "first").await;
    let name = rfc3339(start()).replace(':', "%3A");
    let report = format!("/v1/plants/mixer/batches/{name}");
    let before = service.get_json(&report).await;
    assert_eq!(before["verdict"], "consistent");
    let at = rfc3339(start() + Duration::seconds(30));
    let one = csv(&[format!("F-3,{at},170")]);
    filled(&service, "second?complete=true", one).await;
    all_made(&service, "second").await;
    assert_eq!(versions(&service, &name, 1).await.len(), 1);
    assert_eq!(service.get_json(&report).await, before);
}
