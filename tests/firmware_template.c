/* A board for examples/template/board.c, whose stand-ins are cut off: a made-up line, clock
 * and converter. Each kick of the watchdog is one pass of the main loop, and each line
 * printed says what that pass has left: relay, code, hellos so far, error shown.
 *
 * Given PASS:WHAT ... as the environment's BOARD, at that pass `w` welcomes the device, `s`
 * presses the stop button, `r` releases, `d` breaks the converter, `m` mends it, `e` ends.
 */
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const uint8_t welcome[] = {4, 2, 0x93, 1, 4, 1, 0x2F, 0xDD, 0};
static int relay = -1, hellos, shown, broken, stop, to_come;
static uint32_t now_us, passes, code;

uint32_t board_adc_code(void) { return 1400; }
uint32_t board_micros(void) { return now_us; }
int board_tick_due(void) { return now_us % 1000 == 0; }
int board_stop_pressed(void) { return stop == 's'; }
int board_release_pressed(void) { return stop == 'r'; }
void board_output_relay(int connected) { relay = connected; }
void board_show_error(int error) { shown = error; }
void board_setup(void) {}

int board_dac_code(uint32_t to)
{
    code = broken ? code : to;
    return broken ? -1 : 0;
}

int board_link_send(const uint8_t *bytes, int size)
{
    /* A hello's kind stands behind its first code byte, its array of five behind that. */
    for (int k = 0; k + 2 < size; k++)
        hellos += bytes[k] == 4 && bytes[k + 1] == 1 && bytes[k + 2] == 0x95;
    return size;
}

int board_link_receive(uint8_t *bytes, int room)
{
    if (!to_come || room < (int)sizeof welcome)
        return 0;
    to_come = 0;
    memcpy(bytes, welcome, sizeof welcome);
    return (int)sizeof welcome;
}

void board_watchdog_kick(void)
{
    const char *at = getenv("BOARD");
    unsigned pass;
    char what;
    int used;

    printf("%d %u %d %d\n", relay, (unsigned)code, hellos, shown);
    passes++;
    now_us += 250;
    stop = 0;
    for (; at && sscanf(at, "%u:%c%n", &pass, &what, &used) == 2; at += used)
        if (pass == passes) {
            if (what == 'e')
                exit(0);
            to_come |= what == 'w';
            broken = what == 'd' ? 1 : what == 'm' ? 0 : broken;
            stop = what;
        }
}
