// Numbers that count what is done with them. Emitted C is compiled as C++ with its number types
// replaced by these: every sum, product, fused multiply-add and change of type is counted, and
// every use of an element of an array as a load or a store of that element, known by its address.
#include <cmath>
#include <cstddef>
#include <cstdint>
#include <cstdio>
#include <cstdlib>
#include <cstring>
#include <type_traits>
#include <vector>

#include <math.h>
#include <stddef.h>
#include <stdint.h>

struct Array {
    const char *begin, *end;
    size_t size;
    std::vector<long> loads, stores;
};

static long additions, multiplications, fused, conversions;
static std::vector<Array> arrays;

static void touched(const void *address, std::vector<long> Array::*what)
{
    const char *here = static_cast<const char *>(address);
    for (Array &one : arrays)
        if (one.begin <= here && here < one.end)
            (one.*what)[static_cast<size_t>(here - one.begin) / one.size]++;
}

template <class T> class Counted {
    T value;

public:
    Counted() = default;
    Counted(const Counted &other) : value(other.read()) {}
    // From a constant of the source; one in another floating type is converted there too.
    template <class U, class = std::enable_if_t<std::is_arithmetic_v<U>>>
    Counted(U constant) : value(static_cast<T>(constant))
    {
        conversions += std::is_floating_point_v<U> && !std::is_same_v<T, U>;
    }
    template <class U> explicit Counted(const Counted<U> &other) : value(static_cast<T>(other.read()))
    {
        conversions++;
    }
    Counted &operator=(const Counted &other)
    {
        value = other.read();
        touched(this, &Array::stores);
        return *this;
    }
    void fill(T filled) { value = filled; }
    T read() const
    {
        touched(this, &Array::loads);
        return value;
    }
    Counted operator-() const { return Counted(static_cast<T>(-read())); }
    friend Counted operator+(const Counted &p, const Counted &q)
    {
        additions++;
        return Counted(static_cast<T>(p.read() + q.read()));
    }
    friend Counted operator-(const Counted &p, const Counted &q)
    {
        additions++;
        return Counted(static_cast<T>(p.read() - q.read()));
    }
    friend Counted operator*(const Counted &p, const Counted &q)
    {
        multiplications++;
        return Counted(static_cast<T>(p.read() * q.read()));
    }
    friend bool operator==(const Counted &p, const Counted &q) { return p.read() == q.read(); }
    friend bool operator!=(const Counted &p, const Counted &q) { return p.read() != q.read(); }
    friend Counted fma(const Counted &p, const Counted &q, const Counted &r)
    {
        fused++;
        return Counted(static_cast<T>(p.read() * q.read() + r.read()));
    }
    friend Counted fmaf(const Counted &p, const Counted &q, const Counted &r) { return fma(p, q, r); }
};

template <class T> static Counted<T> *made(size_t count)
{
    auto *first = static_cast<Counted<T> *>(malloc(count * sizeof(T) + 1));
    for (size_t place = 0; place < count; place++)
        first[place].fill(static_cast<T>(1 + place % 2));
    const char *begin = reinterpret_cast<const char *>(first);
    arrays.push_back({begin, begin + count * sizeof(T), sizeof(T),
                      std::vector<long>(count), std::vector<long>(count)});
    return first;
}

static void written(const std::vector<long> &counts)
{
    printf("[");
    for (size_t place = 0; place < counts.size(); place++)
        printf("%s%ld", place ? ", " : "", counts[place]);
    printf("]");
}

// One call: a line of JSON with all counts.
#define BEGIN(name) \
    arrays.clear(); \
    additions = multiplications = fused = conversions = 0; \
    printf("{\"name\": \"%s\"", #name);
#define ARRAY(T, name, count) auto *name = made<T##_plain>(count);
#define PLACES(name, count, ...) static const ptrdiff_t name[] = {__VA_ARGS__};
#define RELEASE(name)
#define DONE(name, parts) \
    printf(", \"loads of %s\": ", #name), written(arrays.front().loads); \
    printf(", \"stores of %s\": ", #name), written(arrays.front().stores); \
    arrays.erase(arrays.begin()), free(name);
#define END \
    printf(", \"additions\": %ld, \"multiplications\": %ld", additions, multiplications); \
    printf(", \"fused multiply-adds\": %ld, \"conversions\": %ld}\n", fused, conversions);

using float_plain = float;
using double_plain = double;
using int16_t_plain = int16_t;
using int32_t_plain = int32_t;
using int64_t_plain = int64_t;
#define float Counted<float_plain>
#define double Counted<double_plain>
#define int16_t Counted<int16_t_plain>
#define int32_t Counted<int32_t_plain>
#define int64_t Counted<int64_t_plain>
#define __builtin_fma fma
#define __builtin_fmaf fmaf
