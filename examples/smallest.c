/* The smallest use of the library: a made-up heated tank, sampled once a minute. Two states (water and wall,
 * in kelvin from the working point), one valve (percent), one thermometer (on the water).
 *
 *     cc smallest.c -o smallest $(pkg-config --cflags --libs flatgain)
 *
 * A gain moves machines that can hurt people: what is printed is a proposal to be commissioned with limits in
 * place, not a setting. */
#include <math.h>
#include <stdio.h>

#include <flatgain.h>

int main(void)
{
    static const double A[] = {0.92, 0.05, 0.10, 0.88}, B[] = {0.04, 0.00}, C[] = {1, 0};
    static const double Q[] = {1, 0, 0, 0}, R[] = {0.002}, W[] = {0.09, 0, 0, 0.01}, V[] = {0.04};
    const flatgain_matrices tank = {.discrete = 1,
                                    .states = 2,
                                    .inputs = 1,
                                    .outputs = 1,
                                    .A = A,
                                    .B = B,
                                    .C = C,
                                    .Q = Q,
                                    .R = R,
                                    .W = W,
                                    .V = V,
                                    .accept_percent = NAN};
    flatgain_problem *problem = NULL;
    flatgain_result *result = NULL;
    flatgain_error error;

    flatgain_status status = flatgain_problem_from_matrices(&tank, &problem, &error);
    if (status == FLATGAIN_OK)
        status = flatgain_tune(problem, NULL, &result, &error);
    if (status != FLATGAIN_OK)
        fprintf(stderr, "%s\n", error.text);
    else if (flatgain_result_outcome(result) != FLATGAIN_TUNED)
        printf("%s\n", flatgain_outcome_name(flatgain_result_outcome(result)));
    else
        printf("K = %.4f, J = %.5f, %.2f %% above the best dynamic controller\n",
               flatgain_result_gain(result)[0], flatgain_result_cost(result, FLATGAIN_COST_GAIN),
               flatgain_result_gap_percent(result));
    int exit_status = flatgain_result_exit_status(result);
    flatgain_result_free(result);
    flatgain_problem_free(problem);
    return exit_status;
}
