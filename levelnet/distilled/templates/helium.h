/* Helium, with the measured constants alone: changes that are not 0 are refused. Here too nothing is
   written unless a function returns @{PREFIX}_OK. */
enum { @{PREFIX}_ESCAPE = 6 /* a line of He I is deeper than the table of escape holds */ };
@{stages}
/* Lines of He I to its ground state: @{line_names}
   and two photons from @{decay_name}. Escape: @{escape_rule}.
   In equilibrium with the radiation the field is a blackbody. What is told of light is ln u, u the
   photons per mode over those of the blackbody at T_r, which redshifting leaves as it is: line k
   is lit on its blue side by what line lit_by[k] sent on its red side when ln a was lower by
   delay[k]; -1 and 0 where none is above it and its light is the blackbody.
   The delays are ln of the ratio of energies. */
enum { @{PREFIX}_N_HE1_LINES = @{n_lines} };
extern const int @{prefix}_he1_lit_by[@{n_lines}];
extern const double @{prefix}_he1_delay[@{n_lines}];

/* Escape probability P of each line from the columns n_HeI/H and n_HI/H in s/cm^3 (H the expansion
   rate in 1/s) and T_r in K, in the range of the rates of He I. */
int @{prefix}_he1_escape(double helium_column, double hydrogen_column,
                  double radiation_temperature_k, double escape[@{n_lines}]);

/* The blackbody on the blue side of every line: ln u = 0. */
void @{prefix}_he1_blackbody(double log_blue_side[@{n_lines}]);

/* ln u on the blue side of a line from what the line above sent (ln u on its red side) one delay
   earlier@{feedback_rule}.
   |ln u| is 600 at most. The columns n_HI/H in s/cm^3, above 0, are those of then and of now. */
int @{prefix}_he1_blue_side(int line, double log_sent, double hydrogen_column_then,
                     double hydrogen_column_now, double *log_blue_side);

/* Local conditions of hydrogen and helium. Every fraction is asked for, so that none need be formed
   as a difference; electrons follow from them. Fractions of hydrogen are per hydrogen nucleus,
   those of helium per helium nucleus; all above 0. */
typedef struct {
    double hydrogen_density_cm3; /* all hydrogen nuclei; above 0 */
    double helium_ratio;         /* n_He/n_H; above 0 */
    double ionized_hydrogen;
    double neutral_hydrogen;
    double neutral_helium;
    double singly_ionized_helium;
    double doubly_ionized_helium;
    double matter_temperature_k;
    double radiation_temperature_k;
    double expansion_rate_per_s;        /* H, or a third of the local divergence of velocity */
    double log_blue_side[@{n_lines}]; /* ln u, as above; -600 to 600 */
    @{prefix}_changes changes;     /* 0, 0 */
} @{prefix}_plasma;

/* Slopes of the fractions are net flows, none the difference of large rates. Far from 1/2 a fraction
   is best followed by its odds, to full relative precision: with
       u = ln(x_HII/x_HI), a = ln((x_HeII + x_HeIII)/x_HeI), b = ln(x_HeIII/x_HeII)
   x_HII = 1/(1 + exp(-u)), x_HI = 1/(1 + exp(u)), and so on. Where a falls below -34 and b below
   -30 nothing is left of the ion: let them rest there, for their rates go on being stiff. */
typedef struct {
    double log_hydrogen_per_s; /* du/dt */
    double log_helium_per_s;   /* da/dt */
    double log_double_per_s;   /* db/dt */
    double ionized_hydrogen_per_s;
    double neutral_helium_per_s;
    double singly_ionized_helium_per_s;
    double doubly_ionized_helium_per_s;
    double matter_temperature_k_per_s; /* dT_m/dt = -2 H T_m + compton_rate (T_r - T_m) */
    double compton_rate_per_s;
    double electron_fraction;         /* n_e/n_H */
    double log_red_side[@{n_lines}]; /* ln u that each line sends on */
} @{prefix}_plasma_slopes;

/* Rates of change at local conditions, kept levels of every ion in the quasi-steady state.
   Below T_r = @{coldest_k} K helium is held as it is; its rates fade to that over @{ebb} of ln T_r.
   Where a slope would be no number within the doubles, @{PREFIX}_CONDITIONS.
   He III: @{ion_rule}. */
int @{prefix}_plasma_right_hand_side(const @{prefix}_plasma *plasma, @{prefix}_plasma_slopes *slopes);
