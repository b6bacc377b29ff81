// The verdict in words, for the person who reviews it.
#pragma once

#include <string>

#include "daemon/night/night.h"

namespace nightweigh::night {

// "move. Cost 0.45 bp once. Saves 1.14 bp of growth a year if the wanted mix is the right one. ..." or
// "stay. Held ALDER 19.8 %, wanted 21.4 %, no trade between 18.9 and 23.9. ...".
// `problem` is the gate's question of tonight; the other figures come from the evidence.
std::string reason_in_words(const Evidence& evidence, const gate::Problem& problem,
                            const ClosesOfTheDay& closes, const BookSettings& settings);

}  // namespace nightweigh::night
