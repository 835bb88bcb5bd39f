//! The suite that every store passes, and tests of single parts.

mod cluster;
mod crashes;
mod disk;
mod fleet;
mod handle;
mod migrations;
mod moving;
mod order;
mod parcels;
mod places;
mod processes;
mod suite;
mod suite_removal;
mod suite_upgrades;
mod suite_versions;

/// Makes tests of the suite for a kind of place in which ledgers are kept.
macro_rules! suite {
    ($place:ty: $($module:ident { $($test:ident),* $(,)? })*) => {
        $($(
            #[test]
            fn $test() {
                $crate::tests::$module::$test(&<$place>::new());
            }
        )*)*
    };
}

/// Makes the whole suite.
macro_rules! whole_suite {
    ($place:ty) => {
        suite! { $place:
            suite {
                a_record_is_kept_as_it_came,
                the_same_id_again_changes_nothing,
                outcomes_may_come_first,
                the_same_outcome_again_changes_nothing,
                corrections_replace_and_keep_history,
                bad_outcomes_are_refused_by_row,
                windows_are_days_of_record_time,
                streams_add_up,
                values_beyond_the_two_hundredth_share_a_stream,
                periods_end_before_their_end,
                a_request_that_cannot_be_folded_fails_alone,
                files_are_recognised_by_their_content,
                what_was_written_is_there_after_reopening,
                two_handles_see_each_other,
                a_failure_hides_nothing_that_others_write,
                damage_is_found,
                the_clock_may_go_backwards,
                ids_may_be_of_any_characters,
            }
            suite_versions {
                one_version_is_live,
                going_back_twice_goes_further_back,
                what_must_not_change_does_not,
                shadows_are_kept_beside,
                a_shadow_need_not_know_every_category,
                what_a_bad_model_file_gives,
            }
            suite_removal {
                deleted_records_leave_no_trace_in_summaries,
                a_deleted_id_may_come_again,
                deletion_covers_shadows_and_waiting_outcomes,
                pruned_days_keep_their_summaries,
                what_comes_late_for_a_pruned_day_is_kept_but_not_folded,
                numbers_are_not_given_twice,
            }
            suite_upgrades {
                summaries_of_an_earlier_program_are_computed_anew,
            }
            order {
                any_order_gives_the_same,
            }
            crashes {
                what_was_acknowledged_survives_kills,
                processes_share_a_ledger,
            }
        }
    };
}

mod sqlite {
    whole_suite!(crate::tests::places::SqlitePlace);
}

mod postgres {
    whole_suite!(crate::tests::places::PostgresPlace);
}
