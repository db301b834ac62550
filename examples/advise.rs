//! Advice from a `Vec` of waits: `cargo run --example advise`.

use outwait::advise::{Case, advise};
use outwait::policy::Entry;
use outwait::say;
use outwait::tally::Tally;
use outwait::wait::{Ending, Wait};

fn main() -> Result<(), Box<dyn std::error::Error>> {
    // Couriers: half of them are there within 20 s, the other half at 90 s. Calling the next one takes 2 s.
    let ages = (1..=600).map(|i| if i % 2 == 0 { f64::from(i) / 30.0 } else { 90.0 });
    let waits = ages.map(|age| Wait::new(age, Ending::Done)).collect::<Result<Vec<_>, _>>()?;

    let mut tally = Tally::default();
    waits.iter().for_each(|wait| tally.add(wait));
    let mut entry = Entry::without_policy();
    if let Some(worth) = &mut entry.worth {
        worth.pause.gave_up = 2.0;
    }
    let advice = advise(&Case::new("courier", &tally), &entry, 1);

    let time = advice.advice.give_up_after_s.map_or("never".into(), say::duration);
    println!("give up after {time}: {}", advice.advice.because);
    Ok(())
}
