
/* @{species}: E_i, exchange and D_i as above. */
static const double @{ION}_EQUILIBRIUM[] = {
@{equilibrium}
};
static const double @{ION}_EXCHANGE[] = {
@{exchange}
};
static const double @{ION}_DEPARTURE[] = {
@{departure}
};
static const int @{ION}_LOWER[] = {@{lower}};
static const int @{ION}_UPPER[] = {@{upper}};
static const double @{ION}_BARRIER_K[] = {@{barrier_k}};
static const double @{ION}_RISE_K[] = {@{rise_k}};
static const double @{ION}_LOG_WEIGHT_RATIO[] = {@{log_weight_ratio}};
static const double @{ION}_LOG_WEIGHT[] = {@{log_weight}};
static const double @{ION}_ENERGY_K[] = {@{energy_k}};
static const double @{ION}_SAHA_OFFSET[] = {@{saha_offset}};
static const double @{ION}_IONIZATION_K[] = {@{ionization_k}};
static const stage @{ION} = {
    @{n_kept}, @{n_pairs}, @{cells_x}, @{cells_y}, @{terms},
    @{x_low}, @{x_high}, @{y_low}, @{y_high},
    @{ION}_EQUILIBRIUM, @{ION}_EXCHANGE, @{ION}_DEPARTURE, @{ION}_LOWER, @{ION}_UPPER,
    @{ION}_BARRIER_K, @{ION}_RISE_K, @{ION}_LOG_WEIGHT_RATIO,
    @{ION}_LOG_WEIGHT, @{ION}_ENERGY_K, @{ION}_SAHA_OFFSET, @{ION}_IONIZATION_K
};

int @{prefix}_@{ion}_log_rates(double radiation_temperature_k, double matter_temperature_k,
                        const @{prefix}_changes *changes, @{prefix}_@{ion}_rates *rates)
{
    logarithms found;
    if (changes != NULL && !unchanged(changes)) return @{PREFIX}_CONDITIONS;
    const int status =
        stage_logarithms(&@{ION}, radiation_temperature_k, matter_temperature_k, &found);
    if (status) return status;
    for (int i = 0; i < @{n_kept}; ++i) {
        rates->log_recombination[i] = found.recombination[i];
        rates->log_photoionization[i] = found.photoionization[i];
    }
    for (int p = 0; p < @{n_pairs}; ++p) {
        rates->log_down[p] = found.down[p];
        rates->log_up[p] = found.up[p];
    }
    return @{PREFIX}_OK;
}
