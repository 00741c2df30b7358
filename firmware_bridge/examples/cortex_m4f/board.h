/* The little of a board that the examples need: MPS2 with the AN386 image, as QEMU has it.
 *
 * Replace board.c to move them to hardware: two serial lines, a clock, a tick interrupt.
 */
#ifndef BOARD_H
#define BOARD_H

#include <stddef.h>
#include <stdint.h>

/* Frequency of the processor and of its tick timer, Hz. */
#define BOARD_HZ 25000000u

enum board_line { BOARD_LINK = 0, BOARD_CONSOLE = 1 };

void board_start(void);

/* One byte in or out; 1 when it went, 0 when there is none or no room. Neither waits. */
int board_take(enum board_line line, uint8_t *byte);
int board_give(enum board_line line, uint8_t byte);

/* Text and numbers to the console; these wait. */
void board_text(const char *text);
void board_whole(uint32_t value);
void board_hex(uint32_t value);
void board_figure(const char *name, uint32_t value);

/* The processor's clock, down from 0xffffff in 24 bits. With QEMU's -icount shift=0 an
 * instruction lasts 1 ns, so a count is 40 instructions. */
uint32_t board_counts(void);

/* Call tick() every so many counts (up to 2^24) from an interrupt; board_counts is then
 * of no use. board_now_us is the time since, and may be asked from either place. */
void board_tick_every(uint32_t counts, void (*tick)(void));
uint32_t board_now_us(void);

/* The relay between DAC and amplifier, open from reset on; here LED 0 of the board. */
void board_relay(int closed);

/* Whether the stop button, here button 0 of the board, is held. */
int board_stop_is_held(void);

/* Start the watchdog. Not kicked for so many counts it opens the relay, and after as many
 * again it resets the board, whatever the program does meanwhile. */
void board_watchdog_start(uint32_t counts);
void board_watchdog_kick(void);

/* Wait for an interrupt. */
void board_rest(void);

/* Deepest use of the stack below where board_stack_mark was called with board_stack(), in
 * bytes; 32 also stands for less. */
static inline uint32_t *board_stack(void)
{
    uint32_t *pointer;

    __asm volatile("mov %0, sp" : "=r"(pointer));
    return pointer;
}
void board_stack_mark(uint32_t *from);
uint32_t board_stack_used(void);

/* End, with a status for QEMU's caller. */
void board_exit(int status);

#endif
