/* The fields of a request; see fields.h. */
#include "fields.h"

#include <stddef.h>

struct word_row {
    char name[9];
    char kinds[5];
    uint8_t states;
};

#define ROW(NAME, word, kinds, states) {word, kinds, states},
static const RR_FLASH struct word_row words[RR_WORD_COUNT] = {RR_WORD_LIST(ROW)};
#undef ROW

/* The length of the field that begins at text: up to a space or the end. */
static uint8_t field_length(const char *text)
{
    uint8_t length = 0;
    while (text[length] != '\0' && text[length] != ' ') {
        length++;
    }
    return length;
}

static bool is_word(const char *field, uint8_t length, const RR_FLASH char *word)
{
    for (uint8_t i = 0; i < length; i++) {
        if (field[i] != word[i] || word[i] == '\0') {
            return false;
        }
    }
    return word[length] == '\0';
}

uint8_t rr_fields_word(const char *text, const char **rest)
{
    uint8_t length = field_length(text);
    *rest = text + length;
    for (uint8_t i = 0; i < RR_WORD_COUNT; i++) {
        if (is_word(text, length, words[i].name)) {
            return i;
        }
    }
    return RR_WORD_COUNT;
}

uint8_t rr_fields_states(uint8_t word)
{
    return words[word].states;
}

#define TENTH      429496729ul /* of 2^32 - 1, so that no division is needed */
#define TENTH_REST 5u

/* `0`, or a digit 1 to 9 and further digits, at most `greatest`. */
static bool read_size(const char *field, uint8_t length, uint32_t greatest, uint32_t *value)
{
    if (length == 0 || length > 10 || (field[0] == '0' && length > 1)) {
        return false;
    }
    uint32_t sum = 0;
    for (uint8_t i = 0; i < length; i++) {
        if (field[i] < '0' || field[i] > '9') {
            return false;
        }
        uint8_t digit = (uint8_t)(field[i] - '0');
        if (i == 9 && (sum > TENTH || (sum == TENTH && digit > TENTH_REST))) {
            return false; /* the tenth digit may go past 32 bits */
        }
        sum = sum * 10u + digit;
    }
    *value = sum;
    return sum <= greatest;
}

static bool read_signed(const char *field, uint8_t length, uint32_t *value)
{
    if (length > 0 && field[0] == '-') {
        uint32_t size;
        if (!read_size(field + 1, (uint8_t)(length - 1), 0x80000000ul, &size) || size == 0) {
            return false;
        }
        *value = 0ul - size;
        return true;
    }
    return read_size(field, length, 0x7FFFFFFFul, value);
}

static bool read_hex8(const char *field, uint8_t length, uint32_t *value)
{
    if (length != 8) {
        return false;
    }
    uint32_t sum = 0;
    for (uint8_t i = 0; i < 8; i++) {
        char c = field[i];
        uint8_t digit;
        if (c >= '0' && c <= '9') {
            digit = (uint8_t)(c - '0');
        } else if (c >= 'a' && c <= 'f') {
            digit = (uint8_t)(c - 'a' + 10);
        } else {
            return false;
        }
        sum = sum << 4 | digit;
    }
    *value = sum;
    return true;
}

struct named {
    char name[15];
    uint8_t number;
};

#define NAMED(NAME, word, number) {word, number},
static const RR_FLASH struct named rests[] = {RR_REST_LIST(NAMED)};
static const RR_FLASH struct named forms[] = {RR_FORM_LIST(NAMED)};
#undef NAMED
#define NAMED(NAME, word, number, per, least, greatest, standard, tighter) {word, number},
static const RR_FLASH struct named limits[] = {RR_LIMIT_LIST(NAMED)};
#undef NAMED

static bool read_named(const RR_FLASH struct named *table, uint8_t rows, const char *field, uint8_t length, uint32_t *value)
{
    for (uint8_t i = 0; i < rows; i++) {
        if (is_word(field, length, table[i].name)) {
            *value = table[i].number;
            return true;
        }
    }
    return false;
}

static bool read_field(char kind, const char *field, uint8_t length, uint32_t *value)
{
    switch (kind) {
    case 'u':
    case 'a':
    case 's':
    case 'n':
    case 't':
        return read_size(field, length, 0xFFFFFFFFul, value);
    case 'i':
        return read_signed(field, length, value);
    case 'h':
        return read_hex8(field, length, value);
    case 'R':
        return read_named(rests, sizeof rests / sizeof rests[0], field, length, value);
    case 'F':
        return read_named(forms, sizeof forms / sizeof forms[0], field, length, value);
    case 'L':
        return read_named(limits, sizeof limits / sizeof limits[0], field, length, value);
    default:
        return false;
    }
}

bool rr_fields_arguments(uint8_t word, const char *rest, struct rr_arguments *arguments)
{
    const RR_FLASH char *kind = words[word].kinds;
    arguments->count = 0;
    while (*rest == ' ') {
        const char *field = rest + 1;
        uint8_t length = field_length(field);
        rest = field + length;
        if (*kind == '\0' || *kind == '?' || arguments->count == RR_ARGUMENTS_MAX ||
            !read_field(*kind, field, length, &arguments->value[arguments->count])) {
            return false;
        }
        arguments->count++;
        kind++;
    }
    return *kind == '\0' || *kind == '?' || (*kind != '\0' && kind[1] == '?');
}
