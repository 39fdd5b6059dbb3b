
/* ln(P/S) of each line, P the escape probability and S that of Sobolev, where hydrogen absorbs:
   coefficients of uniform cubic B-splines in ln(n_HeI/H), ln(n_HI/H) and ln T_r; line, then the
   three axes. First node, spacing and number of cells of each axis. */
enum { ESCAPE_1 = @{escape_1}, ESCAPE_2 = @{escape_2}, ESCAPE_3 = @{escape_3} };
static const double ESCAPE_LOW[3] = {@{escape_low}};
static const double ESCAPE_STEP[3] = {@{escape_step}};
static const double ESCAPE[HE1_LINES * ESCAPE_1 * ESCAPE_2 * ESCAPE_3] = {
@{escape_values}
};

/* Cell of x on an axis and the four B-splines there. Below the columns ln(P/S) is proportional to
   them: `scale` becomes less than 1. */
static int spline_cell(int axis, double x, int count, int *first, double weight[4], double *scale)
{
    if (axis < 2 && x < ESCAPE_LOW[axis]) {
        *scale *= exp(x - ESCAPE_LOW[axis]);
        x = ESCAPE_LOW[axis];
    }
    const int cells = count - 3;
    const double position = (x - ESCAPE_LOW[axis]) / ESCAPE_STEP[axis];
    if (!(position >= -1e-9 && position <= cells + 1e-9)) return @{PREFIX}_ESCAPE;
    int i = (int)position;
    if (i > cells - 1) i = cells - 1;
    double t = position - i;
    t = t < 0.0 ? 0.0 : t > 1.0 ? 1.0 : t;
    const double u = 1.0 - t;
    weight[0] = u * u * u / 6.0;
    weight[1] = 2.0 / 3.0 - t * t * (1.0 - 0.5 * t);
    weight[2] = 2.0 / 3.0 - u * u * (1.0 - 0.5 * u);
    weight[3] = t * t * t / 6.0;
    *first = i;
    return @{PREFIX}_OK;
}

static int gains(double column, double hydrogen_column, double log_kelvin, double gain[HE1_LINES])
{
    const double x[3] = {column, hydrogen_column, log_kelvin};
    const int counts[3] = {ESCAPE_1, ESCAPE_2, ESCAPE_3};
    double weight[3][4], scale = 1.0;
    int first[3];
    for (int axis = 0; axis < 3; ++axis) {
        const int status =
            spline_cell(axis, x[axis], counts[axis], &first[axis], weight[axis], &scale);
        if (status) return status;
    }
    for (int k = 0; k < HE1_LINES; ++k) {
        gain[k] = 0.0;
        for (int a = 0; a < 4; ++a)
            for (int b = 0; b < 4; ++b) {
                const double *row =
                    ESCAPE +
                    (ptrdiff_t)((k * ESCAPE_1 + first[0] + a) * ESCAPE_2 + first[1] + b) * ESCAPE_3 +
                    first[2];
                double inner = 0.0;
                for (int c = 0; c < 4; ++c) inner += weight[2][c] * row[c];
                gain[k] += weight[0][a] * weight[1][b] * inner;
            }
        gain[k] *= scale;
    }
    return @{PREFIX}_OK;
}
