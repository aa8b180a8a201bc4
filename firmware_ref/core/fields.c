/* The fields of a request; see fields.h. */
#include "fields.h"

#include "names.h"

static const RR_FLASH char words[] = RR_WORD_LIST(RR_NAME);
#define KINDS(NAME, word, kinds, states) kinds "\0"
static const RR_FLASH char kinds_of_words[] = RR_WORD_LIST(KINDS);
#undef KINDS
#define STATES(NAME, word, kinds, states) states,
static const RR_FLASH uint8_t states_of_words[RR_WORD_COUNT] = {RR_WORD_LIST(STATES)};
#undef STATES
static const RR_FLASH char rests[] = RR_REST_LIST(RR_NAME);
static const RR_FLASH char forms[] = RR_FORM_LIST(RR_NAME);
static const RR_FLASH char limits[] = RR_LIMIT_LIST(RR_NAME);

/* The length of the field that begins at text: up to a space or the end. */
static uint8_t field_length(const char *text)
{
    uint8_t length = 0;
    while (text[length] != '\0' && text[length] != ' ') {
        length++;
    }
    return length;
}

uint8_t rr_fields_word(const char *text, const char **rest)
{
    uint8_t length = field_length(text);
    *rest = text + length;
    uint8_t word = rr_names_find(words, text, length);
    return word == RR_NAME_UNKNOWN ? (uint8_t)RR_WORD_COUNT : word;
}

uint8_t rr_fields_states(uint8_t word)
{
    return states_of_words[word];
}

#define TENTH      429496729ul /* of 2^32 - 1, so that no division is needed */
#define TENTH_REST 5u

/* `0`, or a digit 1 to 9 and further digits, below 2^32. */
static bool read_size(const char *field, uint8_t length, uint32_t *value)
{
    if (length == 0 || (*field == '0' && length > 1)) {
        return false;
    }
    uint32_t sum = 0;
    for (; length != 0; length--) {
        uint8_t digit = (uint8_t)(*field++ - '0');
        if (digit > 9 || sum > TENTH || (sum == TENTH && digit > TENTH_REST)) {
            return false;
        }
        sum = sum * 10u + digit;
    }
    *value = sum;
    return true;
}

static bool read_signed(const char *field, uint8_t length, uint32_t *value)
{
    bool minus = *field == '-'; /* an empty field ends with another byte */
    if (minus) {
        field++;
        length--;
    }
    if (!read_size(field, length, value)) {
        return false;
    }
    if (minus && *value == 0) {
        return false;
    }
    if (minus) {
        *value = 0ul - *value;
    }
    return minus == (*value >> 31 != 0);
}

int8_t rr_fields_hex(char c)
{
    if (c >= '0' && c <= '9') {
        return (int8_t)(c - '0');
    }
    return c >= 'a' && c <= 'f' ? (int8_t)(c - 'a' + 10) : (int8_t)-1;
}

static bool read_hex8(const char *field, uint8_t length, uint32_t *value)
{
    if (length != 8) {
        return false;
    }
    *value = 0;
    for (; length != 0; length--) {
        int8_t digit = rr_fields_hex(*field++);
        if (digit < 0) {
            return false;
        }
        *value = *value << 4 | (uint8_t)digit;
    }
    return true;
}

static bool read_name(const RR_FLASH char *names, const char *field, uint8_t length, uint32_t *value)
{
    *value = rr_names_find(names, field, length);
    return *value != RR_NAME_UNKNOWN;
}

static bool read_field(char kind, const char *field, uint8_t length, uint32_t *value)
{
    switch (kind) {
    case 'i':
        return read_signed(field, length, value);
    case 'h':
        return read_hex8(field, length, value);
    case 'R':
        return read_name(rests, field, length, value);
    case 'F':
        return read_name(forms, field, length, value);
    case 'L':
        return read_name(limits, field, length, value);
    default: /* all others are numbers without a sign */
        return read_size(field, length, value);
    }
}

bool rr_fields_arguments(uint8_t word, const char *rest, struct rr_arguments *arguments)
{
    const RR_FLASH char *kind = rr_names_at(kinds_of_words, word);
    arguments->count = 0;
    while (*rest == ' ') {
        const char *field = rest + 1;
        uint8_t length = field_length(field);
        rest = field + length;
        if (*kind == '\0' || *kind == '?' || !read_field(*kind, field, length, &arguments->value[arguments->count])) {
            return false;
        }
        arguments->count++;
        kind++;
    }
    return *kind == '\0' || *kind == '?' || kind[1] == '?';
}

#define KINDS_FIT(NAME, word, kinds, states) \
    _Static_assert(sizeof kinds - 1u <= RR_ARGUMENTS_MAX, "a request's arguments have places");
RR_WORD_LIST(KINDS_FIT)
#undef KINDS_FIT
_Static_assert(RR_REST_COAST == 0 && RR_REST_BRAKE == 1 && RR_FORM_PACKED == 0 && RR_FORM_PLAIN == 1, "a word's number is its place");
